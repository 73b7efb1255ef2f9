"""The numbers of a model file that say how large and how slow its noise is, and what each moves in the model.

Every one of them is above zero and is fitted as its logarithm.
"""

from __future__ import annotations

import math
from collections.abc import Collection
from dataclasses import dataclass, replace
from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from plant_models.errors import Problem
from plant_models.plant_model import Matrix, StochasticPart
from plant_models.specification import DisturbanceSpec, UnitSpec
from plant_models.stochastic import HOUR, stationary_covariance
from softsensor.estimation.kernel import Floats, Ints, compressed_rows
from softsensor.estimation.schedule_tables import Masks

Key = Literal["noise_sd", "bias_walk_sd", "sd", "time_constant", "walk_sd"]


@dataclass(frozen=True, slots=True)
class NoiseParameter:
    """One number of a model file: in which table of which section, under which key, and what it is now."""

    section: Literal["sensor", "disturbance"]
    index: int
    owner: str
    """The sensor's tag or the disturbance's name."""
    key: Key
    value: float

    @property
    def name(self) -> str:
        """As reports and options call it: ``TI2101A.noise_sd``."""
        return f"{self.owner}.{self.key}"


class NoiseModel(NamedTuple):
    """The stochastic part as far as sensors see it, with its derivatives by the logarithms of p parameters.

    A and the sensors' rows of C in compressed rows; q (n,), P0 (n, n), r (m,). ``q_at`` and ``phi_at`` (p,): the state
    whose q, whose diagonal of A a parameter moves, by ``dq`` and ``dphi``; ``r_at`` (p,): the sensor whose r it moves by
    ``dr``; -1 for none. ``P0_change`` (p, n, n).
    """

    a_ptr: Ints
    a_idx: Ints
    a_val: Floats
    c_ptr: Ints
    c_idx: Ints
    c_val: Floats
    q: Floats
    r: Floats
    P0: Floats
    q_at: Ints
    dq: Floats
    phi_at: Ints
    dphi: Floats
    r_at: Ints
    dr: Floats
    P0_change: Floats


def noise_parameters(spec: UnitSpec, keep: Collection[str] = ()) -> tuple[NoiseParameter, ...]:
    """What can be fitted: noise of sensors, walk of their offsets, disturbances; without those named in ``keep``.

    :raises Problem: ``keep`` names what the model does not have, or everything.
    """
    found: list[NoiseParameter] = []
    for i, sensor in enumerate(spec.sensors):
        found.append(NoiseParameter("sensor", i, sensor.tag, "noise_sd", sensor.noise_sd))
        if sensor.bias_walk_sd > 0.0:
            found.append(NoiseParameter("sensor", i, sensor.tag, "bias_walk_sd", sensor.bias_walk_sd))
    for d, item in enumerate(spec.disturbances):
        if item.sd is not None and item.time_constant is not None:
            found.append(NoiseParameter("disturbance", d, item.name, "sd", item.sd))
            found.append(NoiseParameter("disturbance", d, item.name, "time_constant", item.time_constant))
        elif item.walk_sd is not None:
            found.append(NoiseParameter("disturbance", d, item.name, "walk_sd", item.walk_sd))
    names = [item.name for item in found]
    unknown = [name for name in keep if name not in names]
    if unknown:
        known = ", ".join(names)
        raise Problem(
            *(f"--keep: {name} is no noise of this model; expected one of {known}" for name in unknown)
        )
    free = tuple(item for item in found if item.name not in keep)
    if not free:
        raise Problem("--keep: every noise of the model is named; expected at least one to be fitted")
    return free


def with_values(spec: UnitSpec, parameters: tuple[NoiseParameter, ...], values: Floats) -> UnitSpec:
    """The specification with these parameters at other values; nothing else changes."""
    sensors, disturbances = list(spec.sensors), list(spec.disturbances)
    for item, value in zip(parameters, values, strict=True):
        changed: dict[str, Any] = {item.key: float(value)}
        if item.section == "sensor":
            sensors[item.index] = replace(sensors[item.index], **changed)
        else:
            disturbances[item.index] = replace(disturbances[item.index], **changed)
    return replace(spec, sensors=tuple(sensors), disturbances=tuple(disturbances))


def part_with_values(
    spec: UnitSpec, part: StochasticPart, parameters: tuple[NoiseParameter, ...]
) -> StochasticPart:
    """``part`` with the noise that ``spec`` now has: what a discretisation from the beginning would give.

    Only coefficients, variances and starting covariances of the parameters' own states change; paths do not.
    """
    A, q, P0 = part.A.copy(), part.q.copy(), part.P0.copy()
    starts = [*part.disturbance_index, _first_offset(spec, part)]
    for item in parameters:
        if item.key == "bias_walk_sd":
            walk = spec.sensors[item.index].bias_walk_sd
            q[offset_state(spec, part, item.index)] = walk**2 * spec.sample_time / HOUR
        elif item.section == "disturbance":
            disturbance = spec.disturbances[item.index]
            at = part.disturbance_index[item.index]
            A[at, at], q[at] = disturbance_dynamics(disturbance, spec.sample_time)
            if disturbance.sd is not None:
                block = slice(at, starts[item.index + 1])
                P0[block, block] = _stationary(A[block, block], part.P0[block, block], q[at])
    return replace(part, A=A, q=q, P0=P0)


def disturbance_dynamics(disturbance: DisturbanceSpec, sample_time: float) -> tuple[float, float]:
    """A disturbance's coefficient over one sample and the variance of the noise that enters it each sample."""
    if disturbance.sd is not None and disturbance.time_constant is not None:
        decay = sample_time / disturbance.time_constant
        return math.exp(-decay), -(disturbance.sd**2) * math.expm1(-2.0 * decay)
    assert disturbance.walk_sd is not None
    return 1.0, disturbance.walk_sd**2 * sample_time / HOUR


def _stationary(A: Matrix, like: Matrix, q: float) -> Matrix:
    """Stationary covariance of a block driven at its first state; zero where ``like`` has no variance (integrators)."""
    moving = np.flatnonzero(np.diag(like) > 0.0)
    noise = np.zeros((moving.size, moving.size))
    noise[0, 0] = q
    out = np.zeros_like(like)
    out[np.ix_(moving, moving)] = stationary_covariance(A[np.ix_(moving, moving)], noise)
    return out


def seen_states(spec: UnitSpec, part: StochasticPart) -> NDArray[np.intp]:
    """The states that reach a sensor, now or later: all that the readings' likelihood depends on, in order."""
    seen = np.any(part.C[: len(spec.sensors)] != 0.0, axis=0)
    linked = part.A != 0.0
    while True:
        more = seen | np.any(linked[seen], axis=0)
        if np.array_equal(more, seen):
            return np.flatnonzero(seen)
        seen = more


def noise_model(
    spec: UnitSpec, part: StochasticPart, parameters: tuple[NoiseParameter, ...], entries: Masks | None = None
) -> NoiseModel:
    """The stochastic part that sensors see and its derivatives by the logarithms of ``parameters``, at ``spec``.

    :param entries: what of A and C has a place even where it is zero.
    """
    states = seen_states(spec, part)
    place = {int(state): at for at, state in enumerate(states)}
    count, n = len(parameters), len(states)
    q_at, phi_at, r_at = (np.full(count, -1, dtype=np.int64) for _ in range(3))
    dq, dphi, dr, P0_change = np.zeros(count), np.zeros(count), np.zeros(count), np.zeros((count, n, n))
    for j, item in enumerate(parameters):
        if item.key == "noise_sd":
            r_at[j], dr[j] = item.index, 2.0 * spec.sensors[item.index].noise_sd ** 2
            continue
        moved = _moved(spec, part, item)
        if moved.state in place:
            q_at[j] = phi_at[j] = place[moved.state]
            dq[j], dphi[j] = moved.dq, moved.dphi
            P0_change[j] = moved.P0_change[np.ix_(states, states)]
    sensors = len(spec.sensors)
    return NoiseModel(
        *compressed_rows(part.A[np.ix_(states, states)], entries and entries.A[np.ix_(states, states)]),
        *compressed_rows(part.C[:sensors, states], entries and entries.C[:sensors, states]),
        np.ascontiguousarray(part.q[states]),
        np.array([item.noise_sd**2 for item in spec.sensors]),
        np.ascontiguousarray(part.P0[np.ix_(states, states)]),
        q_at,
        dq,
        phi_at,
        dphi,
        r_at,
        dr,
        P0_change,
    )


class _Moved(NamedTuple):
    """The state that a parameter drives, and derivatives of its q, of its coefficient, of P0 (n, n)."""

    state: int
    dq: float
    dphi: float
    P0_change: Matrix


def _moved(spec: UnitSpec, part: StochasticPart, item: NoiseParameter) -> _Moved:
    none = np.zeros_like(part.P0)
    if item.key == "bias_walk_sd":
        state = offset_state(spec, part, item.index)
        return _Moved(state, 2.0 * float(part.q[state]), 0.0, none)
    state = part.disturbance_index[item.index]
    if item.key == "walk_sd":
        return _Moved(state, 2.0 * float(part.q[state]), 0.0, none)
    starts = [*part.disturbance_index, _first_offset(spec, part)]
    block = slice(state, starts[item.index + 1])
    P0_change = none
    if item.key == "sd":
        P0_change[block, block] = 2.0 * part.P0[block, block]
        return _Moved(state, 2.0 * float(part.q[state]), 0.0, P0_change)
    disturbance = spec.disturbances[item.index]
    assert disturbance.sd is not None
    assert disturbance.time_constant is not None
    phi = float(part.A[state, state])
    dphi = phi * spec.sample_time / disturbance.time_constant
    dq = -2.0 * disturbance.sd**2 * phi * dphi
    P0_change[block, block] = _stationary_change(part.A[block, block], part.P0[block, block], dq, dphi)
    return _Moved(state, dq, dphi, P0_change)


def _first_offset(spec: UnitSpec, part: StochasticPart) -> int:
    """Index of the first offset; offsets follow all disturbances."""
    return int(part.A.shape[0]) - sum(
        item.bias_walk_sd > 0.0 or item.bias_initial_sd > 0.0
        for items in (spec.sensors, spec.estimates)
        for item in items
    )


def offset_state(spec: UnitSpec, part: StochasticPart, sensor: int) -> int:
    """Index of the state of a sensor's offset."""
    before = spec.sensors[:sensor]
    return _first_offset(spec, part) + sum(
        item.bias_walk_sd > 0.0 or item.bias_initial_sd > 0.0 for item in before
    )


def _stationary_change(A: Matrix, P: Matrix, dq: float, dphi: float) -> Matrix:
    """The dP of P = A P A' + Q when q[0] moves by dq and A[0, 0] by dphi; integrators stay at zero.

    dP = A dP A' + dA P A' + A P dA' + dQ, summed by doubling.
    """
    moving = np.flatnonzero(np.diag(P) > 0.0)
    power = A[np.ix_(moving, moving)]
    cross = (power @ P[np.ix_(moving, moving)][:, 0]) * dphi
    total = np.zeros_like(power)
    total[0] += cross
    total[:, 0] += cross
    total[0, 0] += dq
    for _ in range(60):
        more = power @ total @ power.T
        total = total + 0.5 * (more + more.T)
        power = power @ power
        if np.abs(more).max() <= 1e-17 * np.abs(total).max() and np.abs(power).max() < 1e-9:
            break
    change = np.zeros_like(P)
    change[np.ix_(moving, moving)] = total
    return change
