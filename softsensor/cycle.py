"""THE path: the readings of a cycle and the state before it give the state after it and the results.

Live, replay, late results and commissioning all come through :func:`run_cycles`. It has no clock, no input or output,
and changes nothing that it is given.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from plant_models.errors import Problem
from plant_models.model_scale import from_model
from softsensor.block_arrays import BlockInputs, BlockOutputs, empty_outputs, rows_of_inputs, rows_of_outputs
from softsensor.compiled_cycle import run_block
from softsensor.cycle_results import CycleResults, Digest, digest_of, flag_bytes, outside
from softsensor.detection.detection_design import sensors_in_use
from softsensor.detection.flagged_bias import as_diagnosed
from softsensor.detection.flags import Beginning, FlagBook
from softsensor.detection.follow_up import follow_up
from softsensor.detection.outcomes import FollowUp, Moment
from softsensor.detection.people import Decision, Taken, ended, next_end, take
from softsensor.detection.plant_states import StateChange, change_state
from softsensor.detection.state_of_tests import TestState, initial_tests
from softsensor.estimation.kernel import CHUNK, EstimatorState, Floats, empty_states, initial_state, state_of
from softsensor.layout import (
    BEYOND_ABOVE,
    BEYOND_BELOW,
    LabAtCycle,
    Laid,
    UnitDesign,
    block_inputs,
    laid_out,
    usable,
    usable_inputs,
    with_book,
)
from softsensor.published import limits_in_model_scale
from softsensor.readings_of_cycle import CycleReadings

__all__ = [
    "BEYOND_ABOVE",
    "BEYOND_BELOW",
    "REJECTED",
    "CycleState",
    "LabAtCycle",
    "UnitDesign",
    "UnsoundArithmetic",
    "block_inputs",
    "decide",
    "doubts_of",
    "estimate_status",
    "rerun",
    "run_cycles",
    "run_laid",
    "start",
    "unit_tests",
    "usable",
    "usable_inputs",
]

REJECTED = 2
"""After so many laboratory results in a row that do not fit, the estimate is in doubt, not the laboratory."""


class UnsoundArithmetic(Problem):
    """An innovation's variance is not positive: nothing is repaired, the unit stops."""


@dataclass(frozen=True)
class CycleState:
    """All that goes from one cycle to the next."""

    estimator: EstimatorState
    tests: TestState
    book: FlagBook
    digest: Digest
    rejected: tuple[int, ...]
    """Per estimate, how many laboratory results in a row did not fit."""

    @property
    def next_cycle(self) -> int:
        """Number of the coming cycle; the first one is 0."""
        return int(self.tests.cycle[0])


def unit_tests(design: UnitDesign, window: int) -> TestState:
    """The tests of a unit before its first cycle."""
    kernel, bank = design.kernel, design.detection.tests.reference
    suspects, memory = design.detection.suspects, design.detection.long_memory
    kept = memory.kept if memory is not None else 0
    return initial_tests(kernel.n_sensors, bank.shape[1], kernel.n_inputs, window, len(suspects), kept)


def start(design: UnitDesign, first_cycle: int = 0) -> CycleState:
    """The state before the first cycle."""
    tests = unit_tests(design, design.detection.window)
    tests.cycle[0] = first_cycle
    tests.valid_from[0] = first_cycle + design.detection.settled_after
    none = (0,) * design.kernel.n_estimates
    past = design.detection.forgetting
    book = FlagBook(beginning=Beginning(first_cycle + past.onset_by, first_cycle + past.until))
    return CycleState(initial_state(design.model, design.kernel), tests, book, Digest(), none)


Ran = tuple[CycleState, CycleResults, tuple[tuple[int, EstimatorState], ...]]


def run_cycles(
    design: UnitDesign, state: CycleState, readings: CycleReadings, labs: tuple[LabAtCycle, ...] = ()
) -> Ran:
    """Run cycles up to the end of ``readings``, to the first one at which a test has news, that one included, or to
    the last one before something that a person decided ends.

    :param readings: every input finite; row 0 is cycle ``state.next_cycle``.
    :param labs: results that count within these cycles, in order of cycle.
    :return: state and results, and the estimator's state before each of these cycles that begins a chunk, with its number.
    :raises UnsoundArithmetic: a variance is not positive.
    """
    return run_laid(design, state, laid_out(design, readings), labs)


def run_laid(design: UnitDesign, state: CycleState, laid: Laid, labs: tuple[LabAtCycle, ...] = ()) -> Ran:
    """As :func:`run_cycles`, for cycles that are laid out; the results share their memory."""
    first, n = state.next_cycle, min(len(laid), next_end(state.book, state.next_cycle))
    times = laid.readings.times
    estimator, tests = state.estimator.copy(), state.tests.copy()
    begun = ended(design.detection, state.book, tests, first, int(times[0]))
    data = with_book(design, rows_of_inputs(laid.data, 0, n), begun.book, first, labs)
    out = rows_of_outputs(laid.out, 0, n, len(labs))
    known = design.detection.standing(sensors_in_use(design.detection, begun.book, tests, first))
    starts = range(first + -first % CHUNK, first + n, CHUNK)
    kept = empty_states(estimator, len(starts))
    done = run_block(design.kernel, estimator, design.detection.tests, tests, known, data, out, True, kept)
    if done < 0:
        raise UnsoundArithmetic(
            f"{design.model.spec.name}: an innovation's variance is not positive near cycle {first}"
        )
    outcome = FollowUp(begun.book)
    if done and out.news[done - 1]:
        moment = Moment(first + done - 1, int(times[done - 1]), out.events[done - 1], int(out.news[done - 1]))
        outcome = follow_up(design.detection, begun.book, tests, moment)
    results = replace(
        _results(design, begun.book, state, done, laid, (data, out)),
        flags=outcome.changes,
        notes=begun.notes + outcome.notes,
        rests=begun.rests + outcome.rests,
        rewind=outcome if outcome.exclusion is not None else None,
    )
    digest = digest_of(state.digest, results)
    states = tuple((at, state_of(kept, m)) for m, at in enumerate(starts) if at < first + done)
    return CycleState(estimator, tests, outcome.book, digest, state.rejected), results, states


def doubts_of(design: UnitDesign, book: FlagBook, cycle: int, rejected: tuple[int, ...]) -> list[str]:
    """Per estimate, what speaks against it besides its inputs: flagged instruments in use, a state of the plant, results
    that do not fit.
    """
    flagged = [
        f"{flag.tag} is flagged ({flag.kind})" for flag in book.doubted(cycle, design.model.sensor_tags)
    ]
    flagged += ["the plant was moving when the run began"] if book.unsteady(cycle) else []
    flagged += [state.key for state in book.states if state.uncertain and state.covers(cycle)]
    return [
        "; ".join(
            [*flagged, *([f"the last {count} laboratory results do not fit"] if count >= REJECTED else [])]
        )
        for count in rejected
    ]


def decide(
    design: UnitDesign,
    state: CycleState,
    decisions: Sequence[Decision],
    time: int,
    changes: Sequence[StateChange] = (),
) -> tuple[CycleState, FollowUp, tuple[Taken, ...]]:
    """What people have decided, and then what the plant's state has become, takes effect at the coming cycle, at ``time``:
    the state, what to tell, what became of the decisions.
    """
    outcome, taken, digest = FollowUp(state.book), [], state.digest
    for decision in decisions:
        outcome, one = take(design.detection, outcome, state.next_cycle, time, decision)
        digest = digest.mix(one.as_bytes())
        taken.append(one)
    for change in changes:
        outcome = change_state(design.detection, outcome, state.next_cycle, time, change)
        digest = digest.mix(change.as_bytes(state.next_cycle))
    digest = digest.mix(b"".join(flag_bytes(flag) for flag in outcome.changes))
    return replace(state, book=outcome.book, digest=digest), outcome, tuple(taken)


def rerun(
    design: UnitDesign,
    estimator: EstimatorState,
    book: FlagBook,
    first: int,
    readings: CycleReadings,
    labs: tuple[LabAtCycle, ...],
) -> tuple[EstimatorState, BlockOutputs]:
    """Run the estimator alone over past cycles: what late results and sensors left out from their onset on need.

    The fault tests are not run again: what was flagged stays as flagged.
    """
    estimator = estimator.copy()
    data = block_inputs(design, book, first, readings, labs)
    out = empty_outputs(len(readings), design.kernel, len(labs))
    unused = unit_tests(design, 1)
    known = design.detection.standing(np.ones(design.kernel.n_sensors, dtype=np.int64))
    done = run_block(design.kernel, estimator, design.detection.tests, unused, known, data, out, False)
    if done < 0:
        raise UnsoundArithmetic(
            f"{design.model.spec.name}: an innovation's variance is not positive near cycle {first}"
        )
    return estimator, out


def _results(
    design: UnitDesign,
    book: FlagBook,
    before: CycleState,
    done: int,
    laid: Laid,
    arrays: tuple[BlockInputs, BlockOutputs],
) -> CycleResults:
    """The first ``done`` cycles as results; ``before``: the state before them."""
    (data, out), first = arrays, before.next_cycle
    scale = np.array([item.interval_scale for item in design.model.spec.estimates])
    doubts = doubts_of(design, book, first, before.rejected)
    estimate, in_block = out.estimate[:done], data.lab_at < done
    doubtful = laid.doubtful[:done] | (out.settling[:done] != 0)
    if book.exclusions:
        doubtful |= np.any(data.use[:done] == 0, axis=1)
    status = estimate_status(design, estimate, doubtful)
    return CycleResults(
        first,
        laid.readings.times[:done],
        laid.reading[:done],
        estimate,
        out.estimate_sd[:done] * scale,
        status | np.array([bool(text) for text in doubts], dtype=np.int8),
        out.predicted[:done],
        out.innovation[:done],
        out.innovation_sd[:done],
        out.used[:done],
        (data.use[:done] == 0).view(np.int8),
        np.broadcast_to(np.array(doubts, dtype=object), (done, len(doubts))),
        out.settling[:done] * np.int8(2 if book.unsteady(first) else 1),
        out.high[:done],
        out.low[:done],
        as_diagnosed(design.detection, book, first, out.beyond[:done]),
        out.lab_predicted[in_block],
        out.lab_sd[in_block],
    )


def estimate_status(design: UnitDesign, estimate: Floats, doubtful: NDArray[np.bool_]) -> NDArray[np.int8]:
    """(N, n_estimates) 1 (Uncertain) where all are ``doubtful`` (N,), or one is outside its validated range or its physical
    limits.
    """
    estimates = design.model.spec.estimates
    status = np.repeat(doubtful[:, None], len(estimates), axis=1)
    for e, estimated in enumerate(estimates):
        if estimated.validated_range is not None:
            status[:, e] |= outside(from_model(estimated, estimate[:, e]), estimated.validated_range)
        if estimated.limits is not None or estimated.transform is not None:
            status[:, e] |= outside(estimate[:, e], limits_in_model_scale(estimated))
    return status.view(np.int8)
