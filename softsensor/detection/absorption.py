"""How much of a constant sensor bias stays in the innovations once the filter has settled with it.

A filter can swallow the fault that it should show. With a bias b (m,) on the sensors the settled
innovation has mean::

    (I - C (I - A + L C)^-1 L) b        L = A K the predictor gain

For a walk that one sensor alone sees this is exactly zero: the drift is followed, the estimate goes wrong
with it, and no test ever speaks. For one first-order state a it is (1 - a) / (1 - a (1 - K)) of the bias.
Directions without a steady variance that no sensor sees are left out (they reach no innovation), constants
are as good as known.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve

from plant_models.errors import RealisationError
from plant_models.model_scale import scale_at_operating_point
from plant_models.plant_model import PlantModel
from plant_models.units import difference_unit
from softsensor.estimation.observability import owners
from softsensor.estimation.steady_state import SteadyState, steady_state

Matrix = NDArray[np.float64]

LATEST_FLAG = 0.1
"""Share of the false-flag interval: where a test needs longer on average for a shift, a flag is hardly better than a
false one.
"""

LONGEST_FADING = 20_000
LEAST_FADING = 0.05
"""A bias that loses no more than this share of itself is said never to fade."""


@dataclass(frozen=True, slots=True)
class SensorShift:
    """What a bias the size of a sensor's tolerance leaves in that sensor's own innovation.

    ``at_once`` and ``settled``: the innovation's mean in its standard deviations, at the onset and in the
    end; ``half_faded``: seconds until half of the difference is gone, None where it takes very long or next to
    nothing fades (then ``absorbed_by`` is None too); ``absorbed_by``: what takes up most of the difference, a
    disturbance's name or an offset's. ``unit``: of the bias and of ``innovation_sd``, both differences.
    """

    tag: str
    unit: str
    bias: float
    innovation_sd: float
    at_once: float
    settled: float
    half_faded: float | None
    absorbed_by: str | None


def settled_innovation(state: SteadyState, A: Matrix) -> Matrix:
    """(m, m): column j is the settled mean of all innovations for a unit bias of sensor j.

    :raises RealisationError: the filter forgets its errors too slowly for this to be computed.
    """
    return np.asarray(np.eye(state.rows.r.size) - state.rows.C @ settled_error(state, A), dtype=np.float64)


def settled_error(state: SteadyState, A: Matrix) -> Matrix:
    """(n, m): where the predicted state settles for a unit bias of each sensor, (I - A + L C)^-1 L."""
    T = state.settling
    if not state.stabilising:
        raise RealisationError(
            f"the settled filter does not forget its errors: spectral radius {state.spectral_radius:.17g}"
        )
    L, C = T.T @ state.L, state.rows.C @ T
    matrix = np.eye(T.shape[1]) - T.T @ A @ T + L @ C
    error = solve(matrix, L) if T.shape[1] else L
    if T.shape[1]:
        wrong = np.abs(matrix @ error - L).max(initial=0.0)
        if wrong > 1e-8 * max(1.0, np.abs(L).max(initial=0.0)):
            raise RealisationError("the settled innovation of a biased sensor cannot be computed soundly")
    return np.asarray(T @ error, dtype=np.float64)


def settled_estimates(model: PlantModel) -> Matrix:
    """(n_estimates, n_sensors): where each estimate settles, after the readings of a cycle, for a unit bias of each sensor.

    C_e (x + K (I - C x)) with x the settled error of the predicted state; in the estimate's unit per unit of the sensor, by
    the slopes at the operating points.

    :raises RealisationError: the filter does not settle, or forgets its errors too slowly.
    """
    spec, state = model.spec, steady_state(model)
    error = settled_error(state, model.stochastic.A)
    corrected = error + state.K @ (np.eye(state.rows.r.size) - state.rows.C @ error)
    moved = model.stochastic.C[len(spec.sensors) :] @ corrected
    of_sensors = np.array([scale_at_operating_point(item) for item in spec.sensors])
    of_estimates = np.array([scale_at_operating_point(item) for item in spec.estimates])
    return np.asarray(moved * of_sensors / of_estimates[:, None], dtype=np.float64)


def fading(state: SteadyState, A: Matrix) -> list[int | None]:
    """Cycles after which a constant bias of each sensor has lost half of what its own innovation will lose.

    None: more than LONGEST_FADING. x(k+1) = A x(k) + L (b - C x(k)) from zero, all sensors side by side.
    """
    count = state.rows.r.size
    halfway = 0.5 * (1.0 + np.diag(settled_innovation(state, A)))
    found: list[int | None] = [None] * count
    error = np.zeros((A.shape[0], count))
    for cycle in range(LONGEST_FADING):
        remaining = np.eye(count) - state.rows.C @ error
        for i in np.flatnonzero(np.diag(remaining) <= halfway + 1e-12):
            found[i] = cycle if found[i] is None else found[i]
        if None not in found:
            break
        error = A @ error + state.L @ remaining
    return found


def sensor_shifts(model: PlantModel) -> tuple[SensorShift, ...]:
    """For each sensor, what a bias the size of its tolerance leaves in its innovation.

    :raises RealisationError: the filter does not settle.
    """
    spec, part = model.scaled, model.stochastic
    state = steady_state(model)
    error = settled_error(state, part.A)
    remaining = settled_innovation(state, part.A)
    faded = fading(state, part.A)
    found = []
    for i, sensor in enumerate(spec.sensors):
        of_file = model.spec.sensors[i]
        sd = math.sqrt(state.S[i, i])
        settled = float(abs(remaining[i, i])) * sensor.tolerance / sd
        fades = abs(1.0 - remaining[i, i]) > LEAST_FADING
        half = faded[i]
        found.append(
            SensorShift(
                sensor.tag,
                difference_unit(sensor.unit),
                of_file.tolerance,
                sd / scale_at_operating_point(of_file),
                sensor.tolerance / sd,
                settled,
                half * spec.sample_time if fades and half is not None else None,
                _absorber(owners(part), part.C[i] * error[:, i]) if fades else None,
            )
        )
    return tuple(found)


def is_absorbed(delay: float, promised: float) -> bool:
    """Is a lasting shift beyond finding: does the test need, on average, more than LATEST_FLAG of the run length that
    it keeps without a fault?

    :param delay: the test's average run length under the shift, sums at zero at first.
    :param promised: its run length without a shift, in the same unit.
    """
    return delay > LATEST_FLAG * promised


def _absorber(names: tuple[str, ...], taken: NDArray[np.float64]) -> str | None:
    """The disturbance or offset whose states take up the largest part of a bias; ``taken`` per state."""
    totals: dict[str, float] = {}
    for name, part in zip(names, taken, strict=True):
        totals[name] = totals.get(name, 0.0) + float(part)
    if not totals:
        return None
    return max(totals, key=lambda name: totals[name])
