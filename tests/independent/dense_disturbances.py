"""Disturbances as dense matrices, written from the contract's section 2: a delay line of its own for every path."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from independent.scheduled_paths import momentary, transition
from independent.transfer_paths import Array, continuous, held_transition, split_delay

from plant_models.specification import DisturbanceSpec, EstimateSpec, PathSpec, SensorSpec, UnitSpec

HOUR = 3600.0


@dataclass(frozen=True)
class StateSpace:
    """x(k+1) = A x(k) + w, w ~ N(0, Q); z = C x, sensors first, then estimates; x(0) ~ N(0, P0)."""

    A: Array
    Q: Array
    C: Array
    P0: Array


def output_names(spec: UnitSpec) -> list[str]:
    return [item.tag for item in outputs_of(spec)]


def outputs_of(spec: UnitSpec) -> list[SensorSpec | EstimateSpec]:
    """Sensors first, then estimates: the order of every row here."""
    return [*spec.sensors, *spec.estimates]


def disturbance_block(
    spec: UnitSpec, item: DisturbanceSpec, inputs: dict[str, float], begins: bool
) -> StateSpace:
    """One disturbance, a delay line and a companion form for each of its paths; paths with a schedule at ``inputs``.

    :param begins: whether the covariance at the start is wanted; zero if not.
    """
    names = output_names(spec)
    Ts = spec.sample_time
    own = [p for p in spec.paths if p.source == item.name or (item.at_input and p.source == item.at_input)]
    A, C = np.zeros((1, 1)), np.zeros((len(names), 1))
    steady, integrators = [1.0], []
    if item.sd is not None:
        assert item.time_constant is not None
        A[0, 0] = np.exp(-Ts / item.time_constant)
        variance = item.sd**2 * (1.0 - A[0, 0] ** 2)
    else:
        assert item.walk_sd is not None
        A[0, 0] = 1.0
        variance = item.walk_sd**2 * Ts / HOUR
    for path in own:
        held = held_path(path, Ts, inputs)
        A, C = append_path(A, C, path, held, Ts, names.index(path.target))
        steady += [1.0] * (len(A) - len(steady) - len(held.rest)) + list(held.rest)
        integrators += [len(A) - 1] if path.integrating else []
    Q = np.zeros_like(A)
    Q[0, 0] = variance
    if not begins:
        P0 = np.zeros_like(A)
    elif item.sd is None:
        P0 = item.initial_sd**2 * np.outer(steady, steady)
    else:
        keep = np.setdiff1d(np.arange(len(A)), integrators)
        P0 = np.zeros_like(A)
        P0[np.ix_(keep, keep)] = stationary(A[np.ix_(keep, keep)], Q[np.ix_(keep, keep)])
    return StateSpace(A, Q, C, P0)


class HeldPath(NamedTuple):
    """One sample of a path: phi, columns for the older and the recent value, output row, direct term, state at rest."""

    phi: Array
    older: Array
    recent: Array
    c: Array
    d: float
    rest: Array


def held_path(path: PathSpec, sample_time: float, inputs: dict[str, float]) -> HeldPath:
    """A path over one sample; through its schedule at these values of the inputs."""
    _, rest = split_delay(path.dead_time / sample_time)
    if path.schedule is not None:
        now = momentary(path, inputs[path.schedule.tag])
        return HeldPath(
            *transition(path, inputs[path.schedule.tag], rest, sample_time), now.c, now.d, now.rest
        )
    form = continuous(path, sample_time)
    return HeldPath(*held_transition(form), form.c, form.d, form.steady)


def append_path(
    A: Array, C: Array, path: PathSpec, held: HeldPath, sample_time: float, row: int
) -> tuple[Array, Array]:
    """Add a path's delay line (newest first) and states behind what is there; the disturbance is state 0."""
    whole, rest = split_delay(path.dead_time / sample_time)
    line = whole + (rest > 0.0)
    start, size = len(A), len(A) + line + len(held.rest)
    A2, C2 = np.zeros((size, size)), np.zeros((len(C), size))
    A2[:start, :start], C2[:, :start] = A, C
    past = [0, *range(start, start + line)]
    for newer, place in pairwise(past):
        A2[place, newer] = 1.0
    states = slice(start + line, size)
    A2[states, states] = held.phi
    A2[states, past[whole]] += held.recent
    if rest > 0.0:
        A2[states, past[whole + 1]] += held.older
    C2[row, states] += held.c
    C2[row, past[line]] += held.d
    return A2, C2


def stationary(A: Array, Q: Array) -> Array:
    """P = A P A' + Q of a stable A: the sum of A^i Q A'^i, doubled until it stands still."""
    P, power = Q.copy(), A.copy()
    for _ in range(60):
        more = power @ P @ power.T
        P, power = P + more, power @ power
        if np.abs(more).max() <= 1e-18 * np.abs(P).max():
            return P
    raise AssertionError("no stationary covariance")


def offsets(spec: UnitSpec) -> StateSpace:
    """The random-walk offsets of the outputs that have one."""
    items = outputs_of(spec)
    moving = [i for i, item in enumerate(items) if item.bias_walk_sd > 0.0 or item.bias_initial_sd > 0.0]
    walk = np.array([items[i].bias_walk_sd for i in moving])
    initial = np.array([items[i].bias_initial_sd for i in moving])
    C = np.zeros((len(items), len(moving)))
    C[moving, np.arange(len(moving))] = 1.0
    Q = np.diag(walk**2 * spec.sample_time / HOUR)
    return StateSpace(np.eye(len(moving)), Q, C, np.diag(initial**2))
