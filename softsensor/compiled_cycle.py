"""The compiled loop: correct, report, predict, test, cycle after cycle. Called by softsensor.cycle alone."""

from __future__ import annotations

from softsensor.block_arrays import BlockInputs, BlockOutputs, WorkSpace, work_space
from softsensor.detection.conformance import Evidence, Seen, Standing, follow_cycle
from softsensor.detection.fault_tests import test_cycle
from softsensor.detection.shift_tests import highest_share
from softsensor.detection.state_of_tests import TestDesign, TestState
from softsensor.estimation.compiling import inner, uncounted
from softsensor.estimation.input_driven import accept_inputs, advance_input_driven, input_driven_outputs
from softsensor.estimation.kalman import copy_into
from softsensor.estimation.kernel import CHUNK, EstimatorState, Floats, Kernel, empty_states
from softsensor.estimation.schedules import follow_schedules, private
from softsensor.filter_steps import UNSOUND, filter_cycle, filter_eight


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
    return int(
        _loop(kernel, est, design, tests, known, data, out, testing, kept, work_space(kernel, data.lab_at))
    )


@inner
def _keep(est: EstimatorState, x: Floats, P: Floats, kept: EstimatorState, place: int) -> None:
    """The present state among the stacked ones; its mean and covariance are ``x`` and ``P``."""
    for i in range(len(est.x)):
        kept.x[place, i] = x[i]
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
    P, other, x = space.P, space.other, space.x
    copy_into(est.P, P)
    for i in range(len(est.x)):
        x[i] = est.x[i]
    lab, cycles = 0, len(data.u)
    evidence = Evidence(tests.block, tests.onset, tests.onset_n, tests.onset_d, tests.beyond)
    keep_at, place = (CHUNK - tests.cycle[0] % CHUNK) % CHUNK, 0
    for k in range(len(data.u)):
        if k == keep_at and place < len(kept.head):
            _keep(est, x, P, kept, place)
            keep_at, place = keep_at + CHUNK, place + 1
        if len(kernel.schedules.tag) > 0:
            follow_schedules(kernel, data.u[k])
        accept_inputs(kernel, est, data.u[k])
        input_driven_outputs(kernel, est, space.base)
        if len(kernel.eight.q) > 0:
            lab = filter_eight(kernel, P, other, k, est.streak, data, out, lab, space)
        else:
            lab = filter_cycle(kernel, P, other, k, est.streak, data, out, lab, space)
        if lab < 0:
            return UNSOUND
        advance_input_driven(kernel, est, space.paths)
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
                space.kept_out,
                out.squares[k],
                out.events[k],
            )
            out.news[k] = news
            out.settling[k] = 1 if tests.cycle[0] <= tests.settling_until[0] else 0
            resting = data.quiet[k] != 0 or out.settling[k] != 0
            seen = Seen(out.innovation[k], out.innovation_sd[k], design.noise_sd, tests.ring)
            follow_cycle(known, evidence, seen, tests.cycle[0] - 1, tests.valid_from[0], resting)
            for i in range(kernel.n_sensors):
                out.beyond[k, i] = tests.beyond[i]
                out.high[k, i] = highest_share(tests.high[i], design.interval[i])
                out.low[k, i] = highest_share(tests.low[i], design.interval[i])
            if news != 0:
                cycles = k + 1
                break
    copy_into(P, est.P)
    for i in range(len(est.x)):
        est.x[i] = x[i]
    return cycles
