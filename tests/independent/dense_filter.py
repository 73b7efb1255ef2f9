"""A dense textbook Kalman filter of a whole unit, written from the contract's section 2 and nothing else.

One augmented matrix for all disturbances, a delay line of its own for every path, batch updates with the inverse of
the innovations' covariance, laboratory results as further rows at the cycle of their sampling. Known inputs enter
by superposed step responses, through a schedule by matrices made anew in every cycle. Slow and plain on purpose.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from independent.scheduled_paths import scheduled_response
from independent.transfer_paths import Array, Mask, continuous, held_transition, response_to_held, split_delay

from plant_models.specification import DisturbanceSpec, EstimateSpec, PathSpec, SensorSpec, UnitSpec

HOUR = 3600.0
UNCERTAIN_FACTOR = 3.0


@dataclass(frozen=True)
class StateSpace:
    """x(k+1) = A x(k) + w, w ~ N(0, Q); z = C x, sensors first, then estimates; x(0) ~ N(0, P0)."""

    A: Array
    Q: Array
    C: Array
    P0: Array


@dataclass(frozen=True)
class LabRow:
    """One laboratory result: the cycle it counts at, the cycle it is known from, whose value it is."""

    cycle: int
    known_from: int
    estimate: int
    value: float
    sd: float


@dataclass(frozen=True)
class DenseResult:
    """All (N, n): estimates with their sd, predictions and innovations with their sd (nan where no reading).

    ``lab_predicted`` and ``lab_sd`` (n_labs,) follow the order of the laboratory results given. ``minus_log_l``
    is half the sum of log det(2 pi S) + e' S^-1 e.
    """

    estimate: Array
    sd: Array
    predicted: Array
    innovation: Array
    innovation_sd: Array
    lab_predicted: Array
    lab_sd: Array
    minus_log_l: float
    used: Mask
    """(N, n_sensors): there, and let through by the gate where there is one."""


def output_names(spec: UnitSpec) -> list[str]:
    return [item.tag for item in outputs_of(spec)]


def outputs_of(spec: UnitSpec) -> list[SensorSpec | EstimateSpec]:
    """Sensors first, then estimates: the order of every row here."""
    return [*spec.sensors, *spec.estimates]


def operating_points(spec: UnitSpec) -> Array:
    return np.array([item.operating_point for item in outputs_of(spec)])


def input_driven(spec: UnitSpec, u: Array) -> Array:
    """What the known inputs ``u`` (N, n_inputs), in engineering units, make of every output (N, n_outputs)."""
    names = output_names(spec)
    out = np.tile(operating_points(spec), (len(u), 1))
    for j, item in enumerate(spec.inputs):
        for path in spec.paths:
            if path.source == item.tag:
                deviation = u[:, j] - item.operating_point
                if path.schedule is not None:
                    values = u[:, [other.tag for other in spec.inputs].index(path.schedule.tag)]
                    here = scheduled_response(path, deviation, values, spec.sample_time)
                else:
                    here = response_to_held(continuous(path, spec.sample_time), deviation)
                out[:, names.index(path.target)] += here
    return out


def disturbance_block(spec: UnitSpec, item: DisturbanceSpec) -> StateSpace:
    """One disturbance, a delay line and a companion form for each of its paths."""
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
        A, C = append_path(A, C, path, Ts, names.index(path.target))
        form = continuous(path, Ts)
        steady += [1.0] * (len(A) - len(steady) - form.order) + list(form.steady)
        integrators += [len(A) - 1] if form.integrating else []
    Q = np.zeros_like(A)
    Q[0, 0] = variance
    if item.sd is None:
        P0 = item.initial_sd**2 * np.outer(steady, steady)
    else:
        keep = np.setdiff1d(np.arange(len(A)), integrators)
        P0 = np.zeros_like(A)
        P0[np.ix_(keep, keep)] = stationary(A[np.ix_(keep, keep)], Q[np.ix_(keep, keep)])
    return StateSpace(A, Q, C, P0)


def append_path(A: Array, C: Array, path: PathSpec, sample_time: float, row: int) -> tuple[Array, Array]:
    """Add a path's delay line (newest first) and states behind what is there; the disturbance is state 0."""
    form = continuous(path, sample_time)
    whole, rest = split_delay(form.delay)
    phi, older, recent = held_transition(form)
    line = whole + (rest > 0.0)
    start, size = len(A), len(A) + line + form.order
    A2, C2 = np.zeros((size, size)), np.zeros((len(C), size))
    A2[:start, :start], C2[:, :start] = A, C
    past = [0, *range(start, start + line)]
    for newer, place in pairwise(past):
        A2[place, newer] = 1.0
    states = slice(start + line, size)
    A2[states, states] = phi
    A2[states, past[whole]] += recent
    if rest > 0.0:
        A2[states, past[whole + 1]] += older
    C2[row, states] += form.c
    C2[row, past[line]] += form.d
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


def stochastic(spec: UnitSpec) -> StateSpace:
    """All disturbances and offsets as one system."""
    parts = [disturbance_block(spec, item) for item in spec.disturbances] + [offsets(spec)]
    size = sum(len(part.A) for part in parts)
    A, Q, P0 = np.zeros((size, size)), np.zeros((size, size)), np.zeros((size, size))
    at = 0
    for part in parts:
        here = slice(at, at + len(part.A))
        A[here, here], Q[here, here], P0[here, here] = part.A, part.Q, part.P0
        at += len(part.A)
    return StateSpace(A, Q, np.hstack([part.C for part in parts]), P0)


def through_the_gate(gate: Array, score: Array, row: list[int]) -> Mask:
    """Which of one cycle's standardised innovations (nan: no reading) are used.

    ``row`` counts, per sensor, readings in a row beyond half the gate, with the sign of their side; brought up to date.
    """
    used = np.isfinite(score)
    just_followed = any(3 <= abs(length) < 6 for length in row)
    for i in np.flatnonzero(used):
        side = int(np.sign(score[i])) if abs(score[i]) > 0.5 * gate[i] else 0
        row[i] = int(np.clip(row[i] + side, -6, 6)) if row[i] * side > 0 else side
        used[i] = abs(score[i]) <= gate[i] or abs(row[i]) >= 3 or just_followed
    return used


def filter_in_order(
    spec: UnitSpec,
    u: Array,
    y: Array,
    uncertain: Mask | None = None,
    labs: Sequence[LabRow] = (),
    gate: Array | None = None,
) -> DenseResult:
    """Run over N cycles: ``u`` (N, n_inputs) and ``y`` (N, n_sensors), nan where there is no reading.

    :param uncertain: (N, n_sensors), true where a reading is Uncertain.
    :param gate: (n_sensors,) in standard deviations of the innovation; None for no gate.
    """
    model, mean = stochastic(spec), input_driven(spec, u)
    count, n_sensors = y.shape
    scale = np.array([item.interval_scale for item in spec.estimates])
    noise = np.array([item.noise_sd for item in spec.sensors])
    doubt = np.zeros(y.shape, dtype=bool) if uncertain is None else uncertain
    x, P = np.zeros(len(model.A)), model.P0
    out = {name: np.full(y.shape, np.nan) for name in ("predicted", "innovation", "innovation_sd")}
    estimate, sd = np.zeros((count, len(scale))), np.zeros((count, len(scale)))
    lab_predicted, lab_sd = np.full(len(labs), np.nan), np.full(len(labs), np.nan)
    minus_log_l, row, use = 0.0, [0] * n_sensors, np.isfinite(y)
    H = model.C[:n_sensors]
    for k in range(count):
        out["predicted"][k] = mean[k, :n_sensors] + H @ x
        out["innovation"][k] = y[k] - out["predicted"][k]
        variance = np.diag(H @ P @ H.T) + np.square(noise * np.where(doubt[k], UNCERTAIN_FACTOR, 1.0))
        out["innovation_sd"][k] = np.where(np.isfinite(y[k]), np.sqrt(variance), np.nan)
        if gate is not None:
            use[k] = through_the_gate(gate, out["innovation"][k] / np.sqrt(variance), row)
        seen = np.flatnonzero(use[k])
        here = [at for at, lab in enumerate(labs) if lab.cycle == k]
        rows = [*seen, *(n_sensors + labs[at].estimate for at in here)]
        readings = np.array([*y[k, seen], *(labs[at].value for at in here)])
        sds = [*noise[seen] * np.where(doubt[k, seen], UNCERTAIN_FACTOR, 1.0), *(labs[at].sd for at in here)]
        if rows:
            C = model.C[rows]
            S = C @ P @ C.T + np.diag(np.square(sds))
            inverse = np.linalg.inv(S)
            innovation = readings - mean[k, rows] - C @ x
            K = P @ C.T @ inverse
            x, P = x + K @ innovation, P - K @ C @ P
            P = (P + P.T) / 2.0
            minus_log_l += 0.5 * (np.linalg.slogdet(2.0 * np.pi * S)[1] + innovation @ inverse @ innovation)
            lab_predicted[here] = (readings - innovation)[seen.size :]
            lab_sd[here] = np.sqrt(np.diag(S))[seen.size :]
        E = model.C[n_sensors:]
        estimate[k] = mean[k, n_sensors:] + E @ x
        sd[k] = np.sqrt(np.diag(E @ P @ E.T)) * scale
        x, P = model.A @ x, model.A @ P @ model.A.T + model.Q
    return DenseResult(
        estimate, sd, out["predicted"], out["innovation"], out["innovation_sd"],
        lab_predicted, lab_sd, minus_log_l, use,
    )  # fmt: skip


def known_at_each_cycle(
    spec: UnitSpec,
    u: Array,
    y: Array,
    uncertain: Mask | None,
    labs: Sequence[LabRow],
    gate: Array | None = None,
) -> DenseResult:
    """What was known at every cycle: for each stretch between arrivals, in-order processing of what had arrived.

    A laboratory result's own prediction is the one made when it arrived.
    """
    cuts = sorted({0, len(y), *(lab.known_from for lab in labs)})
    last = None
    joined: dict[str, list[Array]] = {name: [] for name in ("estimate", "sd", "used", *_SENSOR_FIELDS)}
    lab_predicted, lab_sd = np.full(len(labs), np.nan), np.full(len(labs), np.nan)
    for start, stop in pairwise(cuts):
        known = [at for at, lab in enumerate(labs) if lab.known_from <= start]
        last = filter_in_order(spec, u, y, uncertain, [labs[at] for at in known], gate)
        for name, pieces in joined.items():
            pieces.append(getattr(last, name)[start:stop])
        for place, at in enumerate(known):
            if labs[at].known_from == start:
                lab_predicted[at], lab_sd[at] = last.lab_predicted[place], last.lab_sd[place]
    assert last is not None
    whole = {name: np.concatenate(pieces) for name, pieces in joined.items()}
    return DenseResult(**whole, lab_predicted=lab_predicted, lab_sd=lab_sd, minus_log_l=last.minus_log_l)


_SENSOR_FIELDS = ("predicted", "innovation", "innovation_sd")
