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
from plant_models.model_scale import from_model, one_to_model, slopes, to_model
from plant_models.plant_model import PlantModel
from plant_models.specification import Range
from softsensor.compiled_cycle import BlockInputs, BlockOutputs, empty_outputs, run_block
from softsensor.cycle_results import CycleResults, Digest, flag_bytes, outside, result_rows
from softsensor.detection.detection_design import DetectionDesign, sensors_in_use
from softsensor.detection.flagged_bias import as_diagnosed
from softsensor.detection.flags import Beginning, FlagBook
from softsensor.detection.follow_up import follow_up
from softsensor.detection.outcomes import FollowUp, Moment
from softsensor.detection.people import Decision, Taken, ended, next_end, take
from softsensor.detection.plant_states import StateChange, change_state
from softsensor.detection.state_of_tests import TestState, initial_tests
from softsensor.estimation.kernel import (
    CHUNK,
    EstimatorState,
    Floats,
    Ints,
    Kernel,
    empty_states,
    initial_state,
    state_of,
)
from softsensor.published import limits_in_model_scale
from softsensor.readings_of_cycle import CycleQuality, CycleReadings

UNCERTAIN_VARIANCE = 9.0
"""An Uncertain reading counts as one with three times the noise_sd."""
BEYOND_BELOW, BEYOND_ABOVE = 0.025, 0.0625
"""Share of the span below and above a sensor's range beyond which a reading is a failed instrument's, not a reading:
the failure limits 3.6 mA and 21 mA of a 4-20 mA signal (NAMUR NE 43; from memory)."""
REJECTED = 2
"""After so many laboratory results in a row that do not fit, the estimate is in doubt, not the laboratory."""


class UnsoundArithmetic(Problem):
    """An innovation's variance is not positive: nothing is repaired, the unit stops."""


@dataclass(frozen=True)
class UnitDesign:
    """One unit's model, its kernel and its tests, made once."""

    model: PlantModel
    kernel: Kernel
    detection: DetectionDesign
    fresh: Ints
    limits: tuple[Floats, Floats]
    """Lowest and highest value of each sensor that is still a reading."""
    scheduled: tuple[tuple[int, Range], ...] = ()
    """Inputs by which transfer functions go, each with the range that their schedules cover."""


@dataclass(frozen=True)
class LabAtCycle:
    """A laboratory result where it counts: cycle, index of its estimate, value in engineering units, variance in
    model scale; its two times (UTC microseconds) tell whether a later value of the same sample takes its place.
    """

    cycle: int
    estimate: int
    value: float
    variance: float
    sampled: int
    reported: int


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


def usable(design: UnitDesign, readings: CycleReadings) -> tuple[Floats, Floats]:
    """Sensor values with what is no reading taken out, and the factor on each one's noise variance."""
    low, high = design.limits
    bad = readings.y_quality > CycleQuality.UNCERTAIN
    y = np.where(bad | (readings.y < low) | (readings.y > high), np.nan, readings.y)
    scale = np.where(readings.y_quality == CycleQuality.UNCERTAIN, UNCERTAIN_VARIANCE, 1.0)
    return np.ascontiguousarray(y), np.ascontiguousarray(scale)


def usable_inputs(design: UnitDesign, readings: CycleReadings) -> Floats:
    """Input values in model scale."""
    return np.ascontiguousarray(to_model(design.model.spec.inputs, readings.u), dtype=np.float64)


def in_use(book: FlagBook, first: int, cycles: int, n_sensors: int) -> Ints:
    """(cycles, n_sensors): 0 where a sensor is left out of the estimate."""
    use = np.ones((cycles, n_sensors), dtype=np.int64)
    for item in book.exclusions:
        start = max(item.since - first, 0)
        stop = cycles if item.until is None else min(max(item.until - first, 0), cycles)
        use[start:stop, item.sensor] = 0
    return use


def block_inputs(
    design: UnitDesign, book: FlagBook, first: int, readings: CycleReadings, labs: tuple[LabAtCycle, ...]
) -> BlockInputs:
    """Lay readings and laboratory results out for the compiled loop."""
    raw, scale = usable(design, readings)
    sensors, estimates = design.model.spec.sensors, design.model.spec.estimates
    y = np.ascontiguousarray(to_model(sensors, raw))
    return BlockInputs(
        usable_inputs(design, readings),
        y,
        raw,
        slopes(sensors, raw),
        scale,
        in_use(book, first, len(readings), design.kernel.n_sensors),
        design.fresh,
        np.any(readings.u_quality > CycleQuality.UNCERTAIN, axis=1).astype(np.int64),
        _resting(book, first, len(readings)),
        np.array([lab.cycle - first for lab in labs], dtype=np.int64),
        np.array([design.kernel.n_sensors + lab.estimate for lab in labs], dtype=np.int64),
        np.array([one_to_model(estimates[lab.estimate], lab.value) for lab in labs], dtype=np.float64),
        np.array([lab.variance for lab in labs], dtype=np.float64),
    )


def _resting(book: FlagBook, first: int, cycles: int) -> Ints:
    """(cycles,) 1 where the unit's tests rest."""
    if book.rest is None and not book.states:
        return np.zeros(cycles, dtype=np.int64)
    return np.array([book.resting(first + k) for k in range(cycles)], dtype=np.int64)


def run_cycles(
    design: UnitDesign, state: CycleState, readings: CycleReadings, labs: tuple[LabAtCycle, ...] = ()
) -> tuple[CycleState, CycleResults, tuple[tuple[int, EstimatorState], ...]]:
    """Run cycles up to the end of ``readings``, to the first one at which a test has news, that one included, or to
    the last one before something that a person decided ends.

    :param readings: every input finite; row 0 is cycle ``state.next_cycle``.
    :param labs: results that count within these cycles, in order of cycle.
    :return: state and results, and the estimator's state before each of these cycles that begins a chunk, with its number.
    :raises UnsoundArithmetic: a variance is not positive.
    """
    first, n = state.next_cycle, min(len(readings), next_end(state.book, state.next_cycle))
    estimator, tests = state.estimator.copy(), state.tests.copy()
    begun = ended(design.detection, state.book, tests, first, int(readings.times[0]))
    data = block_inputs(design, begun.book, first, readings, labs)
    data = data._replace(u=data.u[:n])
    out = empty_outputs(n, design.kernel, len(labs))
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
        time, news = int(readings.times[done - 1]), int(out.news[done - 1])
        moment = Moment(first + done - 1, time, out.events[done - 1], news)
        outcome = follow_up(design.detection, begun.book, tests, moment)
    results = _results(design, first, done, readings, data, out)
    doubts = doubts_of(design, begun.book, first, state.rejected)
    sensors = design.model.spec.sensors
    results = replace(
        results,
        beyond=as_diagnosed(sensors, begun.book, first, results.beyond),
        settling=results.settling * np.int8(2 if begun.book.unsteady(first) else 1),
        doubts=np.tile(np.array(doubts, dtype=object), (done, 1)),
        status=results.status | np.array([bool(text) for text in doubts], dtype=np.int8),
        flags=outcome.changes,
        notes=begun.notes + outcome.notes,
        rests=begun.rests + outcome.rests,
        rewind=outcome if outcome.exclusion is not None else None,
    )
    digest = state.digest.add(result_rows(results), b"".join(flag_bytes(flag) for flag in results.flags))
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
    first: int,
    done: int,
    readings: CycleReadings,
    data: BlockInputs,
    out: BlockOutputs,
) -> CycleResults:
    scale = np.array([item.interval_scale for item in design.model.spec.estimates])
    estimate = out.estimate[:done]
    in_block = data.lab_at < done
    return CycleResults(
        first,
        readings.times[:done],
        np.where(np.isfinite(out.innovation[:done]), readings.y[:done], np.nan),
        estimate,
        out.estimate_sd[:done] * scale,
        estimate_status(design, readings, estimate, (data.use[:done] == 0, out.settling[:done] != 0)),
        out.predicted[:done],
        out.innovation[:done],
        out.innovation_sd[:done],
        out.used[:done].astype(np.int8),
        (data.use[:done] == 0).astype(np.int8),
        np.full((done, design.kernel.n_estimates), "", dtype=object),
        out.settling[:done].astype(np.int8),
        out.high[:done],
        out.low[:done],
        out.beyond[:done],
        out.lab_predicted[in_block],
        out.lab_sd[in_block],
    )


def estimate_status(
    design: UnitDesign,
    readings: CycleReadings,
    estimate: Floats,
    doubts: tuple[NDArray[np.bool_], NDArray[np.bool_]],
) -> NDArray[np.int8]:
    """1 (Uncertain) where an input is doubtful or was missing, something is outside its validated range or a schedule, a
    sensor is left out, or an estimate lies beyond its physical limits.

    :param doubts: which sensors are left out (N, n_sensors); whether inputs are or were missing (N,).
    """
    n, spec = len(estimate), design.model.spec
    left_out, settling = doubts
    doubtful = (
        np.any(readings.u_quality[:n] != CycleQuality.GOOD, axis=1) | np.any(left_out, axis=1) | settling
    )
    for j, item in enumerate(spec.inputs):
        if item.validated_range is not None:
            doubtful |= outside(readings.u[:n, j], item.validated_range)
    for j, covered in design.scheduled:
        doubtful |= outside(readings.u[:n, j], covered)
    status = np.repeat(doubtful[:, None], len(spec.estimates), axis=1)
    for e, estimated in enumerate(spec.estimates):
        if estimated.validated_range is not None:
            status[:, e] |= outside(from_model(estimated, estimate[:, e]), estimated.validated_range)
        if estimated.limits is not None or estimated.transform is not None:
            status[:, e] |= outside(estimate[:, e], limits_in_model_scale(estimated))
    return status.astype(np.int8)
