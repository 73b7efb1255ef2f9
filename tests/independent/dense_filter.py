"""A dense textbook Kalman filter of a whole unit, written from the contract's section 2 and nothing else.

One augmented matrix for all disturbances, a delay line of its own for every path, batch updates with the inverse of
the innovations' covariance, laboratory results as further rows at the cycle of their sampling. Known inputs enter
by superposed step responses, through a schedule by matrices made anew in every cycle. Slow and plain on purpose.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from independent.dense_disturbances import StateSpace, disturbance_block, offsets, output_names, outputs_of
from independent.scheduled_paths import scheduled_response
from independent.transfer_paths import Array, Mask, continuous, response_to_held

from plant_models.specification import UnitSpec

UNCERTAIN_FACTOR = 3.0


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


def stochastic(spec: UnitSpec, inputs: dict[str, float] | None = None) -> StateSpace:
    """All disturbances and offsets as one system, at the operating points; or at ``inputs``, without P0 then."""
    now = {item.tag: item.operating_point for item in spec.inputs} if inputs is None else inputs
    parts = [disturbance_block(spec, item, now, inputs is None) for item in spec.disturbances]
    parts.append(offsets(spec))
    size = sum(len(part.A) for part in parts)
    A, Q, P0 = np.zeros((size, size)), np.zeros((size, size)), np.zeros((size, size))
    at = 0
    for part in parts:
        here = slice(at, at + len(part.A))
        A[here, here], Q[here, here], P0[here, here] = part.A, part.Q, part.P0
        at += len(part.A)
    return StateSpace(A, Q, np.hstack([part.C for part in parts]), P0)


def course(spec: UnitSpec, u: Array) -> list[StateSpace]:
    """The system of every cycle: the same one where no disturbance goes through a schedule."""
    sources = {item.name for item in spec.disturbances} | {item.at_input for item in spec.disturbances}
    tags = {path.schedule.tag for path in spec.paths if path.schedule is not None and path.source in sources}
    at_rest = stochastic(spec)
    if not tags:
        return [at_rest] * len(u)
    names = [item.tag for item in spec.inputs]
    made: dict[tuple[float, ...], StateSpace] = {}
    systems = []
    for row in u:
        now = {tag: float(value) for tag, value in zip(names, row, strict=True)}
        key = tuple(now[tag] for tag in sorted(tags))
        if key not in made:
            made[key] = replace(stochastic(spec, now), P0=at_rest.P0)
        systems.append(made[key])
    return systems


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
    systems, mean = course(spec, u), input_driven(spec, u)
    count, n_sensors = y.shape
    scale = np.array([item.interval_scale for item in spec.estimates])
    noise = np.array([item.noise_sd for item in spec.sensors])
    doubt = np.zeros(y.shape, dtype=bool) if uncertain is None else uncertain
    x, P = np.zeros(len(systems[0].A)), systems[0].P0
    out = {name: np.full(y.shape, np.nan) for name in ("predicted", "innovation", "innovation_sd")}
    estimate, sd = np.zeros((count, len(scale))), np.zeros((count, len(scale)))
    lab_predicted, lab_sd = np.full(len(labs), np.nan), np.full(len(labs), np.nan)
    minus_log_l, row, use = 0.0, [0] * n_sensors, np.isfinite(y)
    for k, model in enumerate(systems):
        H = model.C[:n_sensors]
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
