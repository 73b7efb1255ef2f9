"""The compiled loop: correct, report, predict, test, cycle after cycle. Called by softsensor.cycle alone."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from softsensor.detection.conformance import Evidence, Seen, Standing, follow_conformance
from softsensor.detection.fault_tests import test_cycle
from softsensor.detection.shift_tests import highest_share
from softsensor.detection.state_of_tests import TestDesign, TestState
from softsensor.estimation.compiling import uncounted
from softsensor.estimation.gate import gates_open, passes
from softsensor.estimation.input_driven import accept_inputs, advance_input_driven, input_driven_outputs
from softsensor.estimation.kalman import (
    copy_into,
    correct,
    predict_into,
    row_mean,
    row_variance,
    unless_rounding,
)
from softsensor.estimation.kernel import CHUNK, EstimatorState, Floats, Ints, Kernel, empty_states
from softsensor.estimation.schedules import follow_schedules, private

UNSOUND = -1
"""Returned where an innovation variance is not positive and finite."""
MOST_SQUARE = 16.0
"""A whitened innovation's square counts up to this in the joint test: one spike is no misfit of the model."""


class BlockInputs(NamedTuple):
    """N cycles as the loop takes them.

    u (N, n_inputs) finite; y (N, n_sensors), nan where missing; raw (N, n_sensors): the same as read, and slope (N or 1,
    n_sensors): how fast y moves with it, for the test of stuck readings; scale (N, n_sensors): factor on the noise variance;
    use (N, n_sensors): 0 keeps a reading from the estimate; fresh (n_sensors,), doubtful and quiet (N,): see
    :func:`test_cycle`;
    lab_at: cycle within the block, ascending; lab_row: output row; lab_value in engineering units; lab_variance.
    """

    u: Floats
    y: Floats
    raw: Floats
    slope: Floats
    scale: Floats
    use: Ints
    fresh: Ints
    doubtful: Ints
    quiet: Ints
    lab_at: Ints
    lab_row: Ints
    lab_value: Floats
    lab_variance: Floats


class BlockOutputs(NamedTuple):
    """What the loop fills: (N, n_sensors) each, estimates (N, n_estimates), one entry per laboratory result."""

    predicted: Floats
    innovation: Floats
    innovation_sd: Floats
    high: Floats
    low: Floats
    estimate: Floats
    estimate_sd: Floats
    used: Ints
    """(N, n_sensors) 1 where a reading has corrected the estimate: there, in use, and let through by the gate."""
    events: Ints
    settling: Ints
    """(N,) 1 while the tests rest because inputs are or were missing."""
    news: Ints
    """(N,) Union of all news of a cycle."""
    beyond: Floats
    """(N, n_sensors) Probability of a bias beyond the tolerance."""
    squares: Floats
    """(N,) Sum of squares of the whitened innovations; a sensor without a reading in use counts as its expectation, 1."""
    lab_predicted: Floats
    lab_sd: Floats


def empty_outputs(cycles: int, kernel: Kernel, labs: int) -> BlockOutputs:
    """Arrays for the results of ``cycles`` cycles."""
    sensors, estimates = (cycles, kernel.n_sensors), (cycles, kernel.n_estimates)
    return BlockOutputs(
        np.full(sensors, np.nan),
        np.full(sensors, np.nan),
        np.full(sensors, np.nan),
        np.zeros(sensors),
        np.zeros(sensors),
        np.full(estimates, np.nan),
        np.full(estimates, np.nan),
        np.zeros(sensors, dtype=np.int64),
        np.zeros(sensors, dtype=np.int64),
        np.zeros(cycles, dtype=np.int64),
        np.zeros(cycles, dtype=np.int64),
        np.zeros(sensors),
        np.zeros(cycles),
        np.full(labs, np.nan),
        np.full(labs, np.nan),
    )


@uncounted
def _innovate(
    kernel: Kernel, x: Floats, P: Floats, base: Floats, k: int, data: BlockInputs, out: BlockOutputs
) -> None:
    for i in range(kernel.n_sensors):
        variance = row_variance(kernel, P, i) + kernel.r[i] * data.scale[k, i]
        out.predicted[k, i] = base[i] + row_mean(kernel, x, i)
        out.innovation_sd[k, i] = np.sqrt(variance)
        if data.y[k, i] == data.y[k, i]:
            out.innovation[k, i] = data.y[k, i] - out.predicted[k, i]


@uncounted
def _admit(
    kernel: Kernel, streak: Ints, k: int, data: BlockInputs, out: BlockOutputs, kept_out: Ints
) -> None:
    """Which readings of the cycle correct the estimate, into ``out.used``, and which the gate has ``kept_out``
    (n_sensors,); its ``streak`` goes on.
    """
    every = gates_open(streak)
    for i in range(kernel.n_sensors):
        kept_out[i] = 0
        if data.use[k, i] != 0 and data.y[k, i] == data.y[k, i]:
            innovation, sd = out.innovation[k, i], out.innovation_sd[k, i]
            out.used[k, i] = 1 if passes(kernel.gate, streak, i, innovation, sd) or every else 0
            kept_out[i] = 1 - out.used[k, i]


@uncounted
def _correct_all(
    kernel: Kernel,
    x: Floats,
    P: Floats,
    base: Floats,
    k: int,
    data: BlockInputs,
    out: BlockOutputs,
    lab: int,
    v: Floats,
    K: Floats,
) -> int:
    """Sensors in file order, then laboratory results; returns the next result's index, or UNSOUND."""
    first = lab
    while lab < len(data.lab_at) and data.lab_at[lab] == k:
        row = data.lab_row[lab]
        variance = row_variance(kernel, P, row) + data.lab_variance[lab]
        out.lab_predicted[lab] = base[row] + row_mean(kernel, x, row)
        out.lab_sd[lab] = np.sqrt(variance)
        lab += 1
    squares = 0.0
    for i in range(kernel.n_sensors):
        if out.used[k, i] != 0:
            deviation, r = data.y[k, i] - base[i], kernel.r[i] * data.scale[k, i]
            innovation = deviation - row_mean(kernel, x, i)
            s = correct(kernel, x, P, i, deviation, r, v, K)
            if s == 0.0:
                return UNSOUND
            squares += min(innovation * innovation / s, MOST_SQUARE)
        else:
            squares += 1.0
    out.squares[k] = squares
    for e in range(first, lab):
        row = data.lab_row[e]
        if not correct(kernel, x, P, row, data.lab_value[e] - base[row], data.lab_variance[e], v, K):
            return UNSOUND
    return lab


@uncounted
def _report(kernel: Kernel, x: Floats, P: Floats, base: Floats, k: int, out: BlockOutputs) -> bool:
    for e in range(kernel.n_estimates):
        row = kernel.n_sensors + e
        out.estimate[k, e] = base[row] + row_mean(kernel, x, row)
        variance = unless_rounding(kernel, P, row, row_variance(kernel, P, row))
        if not variance >= 0.0:
            return False
        out.estimate_sd[k, e] = np.sqrt(variance)
    return True


class WorkSpace(NamedTuple):
    """Arrays that the loop works in: P of the cycle, P of the next one, and vectors."""

    P: Floats
    other: Floats
    v: Floats
    K: Floats
    base: Floats
    paths: Floats
    moves: Floats
    kept_out: Ints


def _work_space(kernel: Kernel) -> WorkSpace:
    n = len(kernel.q)
    return WorkSpace(
        np.zeros((n, n)),
        np.zeros((n, n)),
        np.zeros(n),
        np.zeros(n),
        np.zeros(kernel.n_sensors + kernel.n_estimates),
        np.zeros(len(kernel.steady) + 1),
        np.zeros(kernel.n_inputs),
        np.zeros(kernel.n_sensors, dtype=np.int64),
    )


def run_block(
    kernel: Kernel,
    est: EstimatorState,
    design: TestDesign,
    tests: TestState,
    known: Standing,
    data: BlockInputs,
    out: BlockOutputs,
    testing: bool,
    kept: EstimatorState | None = None,
) -> int:
    """Run cycles until the block ends or, while ``testing``, a test has news; returns the number run, or UNSOUND.

    ``est`` and ``tests`` are work arrays: they hold the state after the last cycle run. ``kept``: stacked states, filled
    with the estimator's before each cycle whose number is a multiple of CHUNK.
    """
    kept = empty_states(est, 0) if kept is None else kept
    kernel = private(kernel)
    return int(_loop(kernel, est, design, tests, known, data, out, testing, kept, _work_space(kernel)))


@uncounted
def _keep(est: EstimatorState, P: Floats, kept: EstimatorState, place: int) -> None:
    """The present state among the stacked ones; its covariance is ``P``."""
    for i in range(len(est.x)):
        kept.x[place, i] = est.x[i]
    copy_into(P, kept.P[place])
    for i in range(len(est.x_in)):
        kept.x_in[place, i] = est.x_in[i]
    copy_into(est.u_past, kept.u_past[place])
    kept.head[place, 0] = est.head[0]
    for i in range(len(est.streak)):
        kept.streak[place, i] = est.streak[i]


@uncounted
def _loop(
    kernel: Kernel,
    est: EstimatorState,
    design: TestDesign,
    tests: TestState,
    known: Standing,
    data: BlockInputs,
    out: BlockOutputs,
    testing: bool,
    kept: EstimatorState,
    space: WorkSpace,
) -> int:
    v, K, base, kept_out, x = space.v, space.K, space.base, space.kept_out, est.x
    P, other = space.P, space.other
    copy_into(est.P, P)
    lab, cycles = 0, len(data.u)
    evidence = Evidence(tests.block, tests.onset, tests.onset_n, tests.onset_d, tests.beyond)
    keep_at, place = (CHUNK - tests.cycle[0] % CHUNK) % CHUNK, 0
    for k in range(len(data.u)):
        if k == keep_at and place < len(kept.head):
            _keep(est, P, kept, place)
            keep_at, place = keep_at + CHUNK, place + 1
        follow_schedules(kernel, data.u[k])
        accept_inputs(kernel, est, data.u[k])
        input_driven_outputs(kernel, est, base)
        _innovate(kernel, x, P, base, k, data, out)
        _admit(kernel, est.streak, k, data, out, kept_out)
        lab = _correct_all(kernel, x, P, base, k, data, out, lab, v, K)
        if lab < 0:
            return UNSOUND
        if not _report(kernel, x, P, base, k, out):
            return UNSOUND
        advance_input_driven(kernel, est, space.paths)
        predict_into(kernel, x, P, v, other)
        P, other = other, P
        if testing:
            for j in range(kernel.n_inputs):
                space.moves[j] = data.u[k, j] - kernel.operating_u[j]
            news = test_cycle(
                design,
                tests,
                data.raw[k],
                data.slope[k if len(data.slope) > 1 else 0],
                space.moves,
                data.fresh,
                data.doubtful[k],
                data.quiet[k],
                out.innovation[k],
                out.innovation_sd[k],
                kept_out,
                out.squares[k],
                out.events[k],
            )
            out.news[k] = news
            out.settling[k] = 1 if tests.cycle[0] <= tests.settling_until[0] else 0
            resting = data.quiet[k] != 0 or out.settling[k] != 0
            seen = Seen(out.innovation[k], out.innovation_sd[k], design.noise_sd, tests.ring)
            follow_conformance(known, evidence, seen, tests.cycle[0] - 1, tests.valid_from[0], resting)
            for i in range(kernel.n_sensors):
                out.beyond[k, i] = tests.beyond[i]
                out.high[k, i] = highest_share(tests.high[i], design.interval[i])
                out.low[k, i] = highest_share(tests.low[i], design.interval[i])
            if news != 0:
                cycles = k + 1
                break
    copy_into(P, est.P)
    return cycles
