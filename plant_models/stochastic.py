"""The disturbances and all that they drive, as one linear system with diagonal process noise.

A disturbance is constant over each sample, so its paths are held exactly like an input's, dead time included;
the values that the dead times still need are states of a shift register. ::

    Gauss-Markov   d(k+1) = phi d(k) + w,  phi = exp(-h/tau),  var w = sd^2 (1 - phi^2)
    random walk    d(k+1) = d(k) + w,      var w = walk_sd^2 h / 1 hour
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from plant_models.discretisation import discretise
from plant_models.errors import RealisationError
from plant_models.plant_model import DiscretePath, ScheduledStates, StochasticPart
from plant_models.schedules import operating_points, path_in_operation
from plant_models.specification import DisturbanceSpec, EstimateSpec, PathSpec, SensorSpec, UnitSpec

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]

HOUR = 3600.0

LARGEST = 1000
"""Most states that one disturbance may need: more is a sample time far too short for its dead times."""


class _Driven(NamedTuple):
    """One disturbance with its past values and its paths: x(k+1) = A x(k) + (q, 0, 0, ...) noise, z = C x."""

    A: Matrix
    q: float
    C: Matrix
    P0: Matrix
    names: tuple[str, ...]


def stochastic_part(spec: UnitSpec) -> StochasticPart:
    """The stochastic part of a unit: a block per disturbance, then an offset per output that has one.

    :raises RealisationError: if a path cannot be realised or a covariance cannot be found.
    """
    outputs = _outputs(spec)
    blocks = [_driven(spec, index) for index in range(len(spec.disturbances))]
    offsets = [
        row for row, output in enumerate(outputs) if output.bias_walk_sd > 0 or output.bias_initial_sd > 0
    ]
    size = sum(block.A.shape[0] for block in blocks) + len(offsets)
    A, P0 = np.zeros((size, size)), np.zeros((size, size))
    q, C = np.zeros(size), np.zeros((len(outputs), size))
    names: list[str] = []
    index: list[int] = []
    for block in blocks:
        start = len(names)
        here = slice(start, start + block.A.shape[0])
        A[here, here], P0[here, here], C[:, here] = block.A, block.P0, block.C
        q[start] = block.q
        names.extend(block.names)
        index.append(start)
    for row in offsets:
        at, output = len(names), outputs[row]
        A[at, at] = C[row, at] = 1.0
        q[at] = _variance(output.tag, output.bias_walk_sd) * spec.sample_time / HOUR
        P0[at, at] = _variance(output.tag, output.bias_initial_sd)
        names.append(f"offset of {output.tag}")
    return StochasticPart(A=A, q=q, C=C, P0=P0, state_names=tuple(names), disturbance_index=tuple(index))


def disturbance_paths(spec: UnitSpec, index: int) -> tuple[DiscretePath, ...]:
    """The discretised paths of one disturbance in file order: its own and those of the input it enters at."""
    rows, points = output_rows(spec), operating_points(spec)
    return tuple(
        discretise(path_in_operation(path, points), index, rows[path.target], spec.sample_time)
        for path in _paths_of(spec, index)
    )


def _paths_of(spec: UnitSpec, index: int) -> tuple[PathSpec, ...]:
    disturbance = spec.disturbances[index]
    sources = {disturbance.name} | ({disturbance.at_input} if disturbance.at_input is not None else set())
    return tuple(path for path in spec.paths if path.source in sources)


def scheduled_states(spec: UnitSpec) -> tuple[ScheduledStates, ...]:
    """The paths from disturbances that change with an input, and where their states are."""
    found: list[ScheduledStates] = []
    start = 0
    for index in range(len(spec.disturbances)):
        paths, discrete = _paths_of(spec, index), disturbance_paths(spec, index)
        state = start + 1 + _past(discrete)
        for path, held in zip(paths, discrete, strict=True):
            if path.schedule is not None:
                newest = start + held.whole_delays
                found.append(ScheduledStates(path, held.row, state, newest, held.fraction))
            state += held.c.size
        start = state
    return tuple(found)


def _past(paths: tuple[DiscretePath, ...]) -> int:
    """Past values that the dead times of a disturbance's paths need."""
    return max((path.whole_delays + (path.fraction > 0.0) for path in paths), default=0)


def output_rows(spec: UnitSpec) -> dict[str, int]:
    """Row of each output: sensors first, then estimates."""
    return {output.tag: row for row, output in enumerate(_outputs(spec))}


def _outputs(spec: UnitSpec) -> tuple[SensorSpec | EstimateSpec, ...]:
    return (*spec.sensors, *spec.estimates)


def stationary_covariance(A: Matrix, noise: Matrix) -> Matrix:
    """The P of P = A P A' + ``noise`` for a stable A (n, n), by doubling: step j holds 2^j terms of the sum.

    Only sums and products of positive semidefinite terms occur, so P is; it is made exactly symmetric.

    :raises RealisationError: if the sum has not converged after 2^60 terms or is not finite.
    """
    power, total = A, noise
    for _ in range(60):
        with np.errstate(over="ignore", invalid="ignore"):
            more = power @ total @ power.T
            more = 0.5 * (more + more.T)
            total = total + more
            power = power @ power
        if not np.isfinite(total).all():
            break
        scale = np.sqrt(np.diag(total))
        if np.all(np.abs(more) <= 1e-18 * np.outer(scale, scale)) and np.abs(power).max(initial=0.0) < 1e-9:
            return total
    raise RealisationError("a disturbance and what it drives have no stationary covariance")


def _driven(spec: UnitSpec, index: int) -> _Driven:
    """One disturbance's block: present value, past values (newest first), then the states of its paths."""
    disturbance = spec.disturbances[index]
    paths = disturbance_paths(spec, index)
    past = _past(paths)
    size = 1 + past + sum(path.c.size for path in paths)
    if size > LARGEST:
        raise RealisationError(
            f"disturbance {disturbance.name}: its dead times need {past} past values, {size} states in all; "
            f"at most {LARGEST} can be run: choose a longer sample time"
        )
    A, C = np.zeros((size, size)), np.zeros((len(spec.sensors) + len(spec.estimates), size))
    steady, integrators = np.ones(size), np.zeros(size, dtype=np.bool_)
    A[0, 0], q = _dynamics(disturbance, spec.sample_time)
    A[np.arange(1, past + 1), np.arange(past)] = 1.0
    start = 1 + past
    for path in paths:
        here = slice(start, start + path.c.size)
        newest = path.whole_delays
        A[here, here] = path.phi
        A[here, newest] += path.gamma_recent
        if path.fraction > 0.0:
            A[here, newest + 1] += path.gamma_older
        C[path.row, here] = path.c
        C[path.row, newest + (path.fraction > 0.0)] += path.d
        steady[here] = path.steady
        integrators[here.stop - 1] |= path.integrating
        start = here.stop
    P0 = _initial_covariance(disturbance, A, q, steady, integrators)
    return _Driven(A, q, C, P0, _names(spec, disturbance, past, paths))


def _dynamics(disturbance: DisturbanceSpec, sample_time: float) -> tuple[float, float]:
    """A disturbance's own coefficient and the variance of the noise that enters it each sample."""
    name = f"disturbance {disturbance.name}"
    if disturbance.time_constant is not None and disturbance.sd is not None:
        decay = sample_time / disturbance.time_constant
        return math.exp(-decay), -_variance(name, disturbance.sd) * math.expm1(-2.0 * decay)
    if disturbance.walk_sd is not None:
        return 1.0, _variance(name, disturbance.walk_sd) * sample_time / HOUR
    raise RealisationError(f"{name}: neither sd with time_constant nor walk_sd is given")


def _variance(name: str, sd: float) -> float:
    """sd squared; refused where the square is no finite number or the sd is negative."""
    variance = sd * sd
    if not (sd >= 0.0 and math.isfinite(variance)):
        raise RealisationError(f"{name}: a standard deviation of {sd} cannot be computed with")
    return variance


def _initial_covariance(
    disturbance: DisturbanceSpec, A: Matrix, q: float, steady: Vector, integrators: NDArray[np.bool_]
) -> Matrix:
    """A block's covariance at the start (n, n): stationary, or steady with the walk; zero for integrators."""
    if disturbance.walk_sd is not None:
        initial = _variance(f"disturbance {disturbance.name}", disturbance.initial_sd)
        return np.asarray(initial * np.outer(steady, steady))
    P0 = np.zeros_like(A)
    moving = np.flatnonzero(~integrators)
    noise = np.zeros((moving.size, moving.size))
    noise[0, 0] = q
    if q > 0.0:
        P0[np.ix_(moving, moving)] = stationary_covariance(A[np.ix_(moving, moving)], noise)
    return P0


def _names(
    spec: UnitSpec, disturbance: DisturbanceSpec, past: int, paths: tuple[DiscretePath, ...]
) -> tuple[str, ...]:
    outputs = _outputs(spec)
    names = [disturbance.name]
    names += [f"{disturbance.name}, {n} sample{'s' if n > 1 else ''} ago" for n in range(1, past + 1)]
    for path in paths:
        way = f"{disturbance.name} -> {outputs[path.row].tag}"
        names += [f"{way}, state {n}" for n in range(1, path.c.size + 1)]
    return tuple(names)
