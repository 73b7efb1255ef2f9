"""One unit's run through time: cycles forward, and back and forward again for late results and excluded sensors.

Live and replay both drive this. It has no clock: what arrived when is handed in.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from plant_models.model_scale import one_from_model, one_to_model
from plant_models.transform import Transform
from softsensor.cycle import REJECTED, CycleState, decide, rerun, run_laid
from softsensor.cycle_results import CycleResults, waiting_results
from softsensor.detection.flags import Note
from softsensor.detection.people import Decision, Taken
from softsensor.detection.plant_states import StateChange
from softsensor.estimation.kernel import CHUNK, EstimatorState, Floats
from softsensor.estimation.lab_results import (
    IMPOSSIBLE,
    LabArrival,
    LabOutcome,
    LabStatus,
    counting_cycle,
    likely_reason,
    slope_variance,
)
from softsensor.estimation.late_readings import LateReadings, UnusedReadings, late_words
from softsensor.estimation.past import Past, Revision
from softsensor.layout import LabAtCycle, Laid, UnitDesign, laid_out
from softsensor.readings_of_cycle import CycleReadings, slice_readings


@dataclass(frozen=True)
class Advance:
    """What a stretch of cycles brought, in order: results, what became of laboratory results and of people's decisions,
    what was revised.
    """

    results: tuple[CycleResults, ...]
    labs: tuple[LabOutcome, ...] = ()
    revisions: tuple[Revision, ...] = ()
    taken: tuple[Taken, ...] = ()


IN_MEMORY = 2**25
"""Bytes of remembered states that one call of the loop may add: its stretches are no longer than that."""

Came = LabArrival | Decision | StateChange | LateReadings | UnusedReadings
"""What may come before a cycle besides its readings."""


class UnitRun:
    """A unit under way.

    ``state`` and ``past`` may come from the records; ``labs`` are the results already counted; ``first_time`` is the
    time of cycle 0, counted back from the first cycle run where that has another number.
    """

    def __init__(
        self,
        design: UnitDesign,
        state: CycleState,
        past: Past,
        labs: Iterable[LabAtCycle] = (),
        first_time: int | None = None,
    ) -> None:
        self.design = design
        self.state = state
        self.past = past
        self.first_time = first_time
        self._labs = sorted(labs, key=_order)
        self._sample_us = design.detection.sample_us
        self._early: list[StateChange] = []
        held = sum(part.nbytes for part in state.estimator)
        self._longest = max(IN_MEMORY // held, 1) * CHUNK

    @property
    def started(self) -> bool:
        """Has every input had a value, so that the first cycle has run?"""
        return self.first_time is not None

    def advance(self, readings: CycleReadings, came: Iterable[Came] = ()) -> Advance:
        """Run these cycles; laboratory results, people's decisions and changes of the plant's state came before
        the first of them.
        """
        all_came = list(came)
        arrivals = [item for item in all_came if isinstance(item, LabArrival)]
        decisions = [item for item in all_came if isinstance(item, Decision)]
        late = [item for item in all_came if isinstance(item, LateReadings | UnusedReadings)]
        self._early += [item for item in all_came if isinstance(item, StateChange)]
        waiting = 0 if self.started else self._rows_to_wait(readings)
        results = (
            [waiting_results(self.design.kernel, slice_readings(readings, 0, waiting))] if waiting else []
        )
        if waiting == len(readings):
            early = [_left_out(item, -1, "before the first cycle") for item in arrivals]
            return Advance(tuple(results), tuple(early))
        if self.first_time is None:
            self.first_time = int(readings.times[waiting]) - self.state.next_cycle * self._sample_us
        now = int(readings.times[waiting])
        self.state, told, taken = decide(self.design, self.state, decisions, now, self._early)
        self._early = []
        outcomes: list[LabOutcome] = []
        news, revisions = self._amend(late)
        noted = tuple(Note(now, "late readings", text) for text in late_words(news, now))
        for arrival in sorted(arrivals, key=lambda item: (item.sampled, item.reported, item.tag, item.value)):
            outcome, revision = self._take(arrival, slice_readings(readings, waiting, waiting + 1))
            outcomes.append(outcome)
            revisions += [revision] if revision is not None else []
        row, laid = 0, laid_out(self.design, slice_readings(readings, waiting, len(readings)))
        while row < len(laid):
            part = laid.rows(row, min(row + self.past.room(self._longest), len(laid)))
            result, revision = self._run(part)
            if row == 0:
                flags, notes = told.changes + result.flags, told.notes + noted + result.notes
                result = replace(result, flags=flags, notes=notes, rests=told.rests + result.rests)
            results.append(result)
            revisions += [revision] if revision is not None else []
            row += len(result)
        return Advance(tuple(results), tuple(outcomes), tuple(revisions), taken)

    @property
    def labs(self) -> tuple[LabAtCycle, ...]:
        """The laboratory results counted so far that can still be gone back to."""
        return tuple(lab for lab in self._labs if lab.cycle >= self.past.first_cycle)

    def _rows_to_wait(self, readings: CycleReadings) -> int:
        complete = np.flatnonzero(np.all(np.isfinite(readings.u), axis=1))
        return int(complete[0]) if len(complete) else len(readings)

    def _labs_between(self, first: int, stop: int) -> tuple[LabAtCycle, ...]:
        return tuple(lab for lab in self._labs if first <= lab.cycle < stop)

    def _run(self, laid: Laid) -> tuple[CycleResults, Revision | None]:
        first = self.state.next_cycle
        labs = self._labs_between(first, first + len(laid))
        self.state, results, states = run_laid(self.design, self.state, laid, labs)
        done = slice_readings(laid.readings, 0, len(results))
        self.past.remember(states, done, results.estimate, results.sd)
        if results.rewind is None or results.rewind.exclusion is None:
            return results, None
        return results, self._go_back(max(results.rewind.exclusion.since, self.past.first_cycle))

    def news_in(self, late: LateReadings) -> LateReadings:
        """Of what past cycles should see of a tag, what they have not seen so, as far back as is remembered."""
        return late.only(self.past.differing(late, self._cycles_of(late)))

    def _cycles_of(self, late: LateReadings) -> NDArray[np.int64]:
        if self.first_time is None:
            return np.full(len(late.times), -1, dtype=np.int64)
        return (late.times - self.first_time) // self._sample_us

    def remember_late(self, late: Sequence[LateReadings]) -> None:
        """Late readings that were counted before a restart are in the state already, but not among what is remembered."""
        for item in late:
            news = self.news_in(item)
            self.past.amend(news, self._cycles_of(news))

    def _amend(
        self, late: Sequence[LateReadings | UnusedReadings]
    ) -> tuple[list[LateReadings | UnusedReadings], list[Revision]]:
        """Count late readings where they belong; what of them is news, and what that has revised."""
        first, told = self.state.next_cycle, []
        for item in late:
            news = self.news_in(item) if isinstance(item, LateReadings) else item
            if isinstance(news, LateReadings) and len(news.times):
                cycles = self._cycles_of(news)
                self.past.amend(news, cycles)
                first = min(first, int(cycles[0]))
                self.state = replace(self.state, digest=self.state.digest.mix(news.as_bytes()))
            told.append(news)
        return told, [self._go_back(first)] if first < self.state.next_cycle else []

    def _go_back(self, cycle: int) -> Revision:
        estimator, revision = self.past.run_again(cycle, self._rerun)
        self.state = replace(self.state, estimator=estimator)
        return revision

    def _rerun(
        self, before: EstimatorState, first: int, readings: CycleReadings
    ) -> tuple[EstimatorState, Floats, Floats]:
        labs = self._labs_between(first, first + len(readings))
        after, out = rerun(self.design, before, self.state.book, first, readings, labs)
        scale = np.array([item.interval_scale for item in self.design.model.spec.estimates])
        return after, out.estimate, out.estimate_sd * scale

    def _take(self, arrival: LabArrival, now: CycleReadings) -> tuple[LabOutcome, Revision | None]:
        """Judge one laboratory result and, unless it cannot be right, count it where it belongs."""
        assert self.first_time is not None
        here = self.state.next_cycle
        cycle = counting_cycle(arrival.sampled, self.first_time, self._sample_us)
        if cycle < self.past.first_cycle or cycle < 0:
            return _left_out(arrival, here, "sampled before the first cycle that is remembered"), None
        if cycle > here:
            return _left_out(arrival, here, "sampled after it was reported"), None
        value, transform = self._in_model_scale(arrival)
        if transform is not None and not np.isfinite(value):
            return _left_out(arrival, here, f"{transform.text}: expected {transform.expected}"), None
        same = [
            lab for lab in self._labs if (lab.estimate, lab.sampled) == (arrival.estimate, arrival.sampled)
        ]
        if any(lab.reported > arrival.reported for lab in same):
            return _left_out(arrival, here, "a value reported later for the same sample is in use"), None
        earlier = [lab for lab in same if lab.reported < arrival.reported]
        variance = self._variance(arrival, cycle)
        lab = LabAtCycle(cycle, arrival.estimate, arrival.value, variance, arrival.sampled, arrival.reported)
        others = [lab for lab in self._labs if lab not in earlier]
        predicted, sd = self._predict(lab, others, now)
        innovation = value - predicted
        possible = abs(innovation) <= IMPOSSIBLE * sd or arrival.decided_at is not None
        rejected = self._rejected(arrival.estimate, possible)
        reason = "" if possible else self._reason(arrival, lab.variance, rejected[arrival.estimate])
        status: LabStatus = "used" if possible else "waiting for a person"
        replaces = tuple(lab.value for lab in earlier) if possible else ()
        in_unit = one_from_model(self.design.model.spec.estimates[arrival.estimate], predicted)
        outcome = LabOutcome(arrival, here, cycle, in_unit, innovation, sd, status, reason, replaces)
        digest = self.state.digest.mix(_lab_bytes(outcome))
        self.state = replace(self.state, digest=digest, rejected=rejected)
        if not possible:
            return outcome, None
        self._labs = sorted([*others, lab], key=_order)
        return outcome, self._go_back(cycle) if cycle < here else None

    def _in_model_scale(self, arrival: LabArrival) -> tuple[float, Transform | None]:
        """A result's value in model scale, nan where its transform has none; and the transform."""
        item = self.design.model.spec.estimates[arrival.estimate]
        return one_to_model(item, arrival.value), item.transform

    def _variance(self, arrival: LabArrival, cycle: int) -> float:
        lab = self.design.model.scaled.estimates[arrival.estimate].lab
        sd = lab.sd if lab is not None else 0.0
        first, _, estimate, _ = self.past.estimates()
        course = estimate[:, arrival.estimate]
        slope = slope_variance(
            course, cycle - first, self.design.model.spec.sample_time, arrival.time_uncertainty
        )
        return sd**2 + slope

    def _predict(
        self, lab: LabAtCycle, others: Sequence[LabAtCycle], now: CycleReadings
    ) -> tuple[float, float]:
        """The prediction of a result from everything known before its cycle, and the sd of its innovation."""
        found = self.past.state_before(lab.cycle) if lab.cycle < self.state.next_cycle else None
        if found is None:
            readings, first, before = now, lab.cycle, self.state.estimator
        else:
            first, before = found
            readings = self.past.readings_between(first, lab.cycle + 1)
        labs = sorted([*(item for item in others if first <= item.cycle <= lab.cycle), lab], key=_order)
        _, out = rerun(self.design, before, self.state.book, first, readings, tuple(labs))
        at = labs.index(lab)
        return float(out.lab_predicted[at]), float(out.lab_sd[at])

    def _rejected(self, estimate: int, possible: bool) -> tuple[int, ...]:
        """How many results in a row have not fitted, per estimate, with this one."""
        return tuple(
            count if e != estimate else (0 if possible else count + 1)
            for e, count in enumerate(self.state.rejected)
        )

    def _reason(self, arrival: LabArrival, variance: float, in_a_row: int) -> str:
        _, times, estimate, sd = self.past.estimates()
        e, (value, _) = arrival.estimate, self._in_model_scale(arrival)
        reason = likely_reason(value, variance**0.5, arrival.sampled, times, estimate[:, e], sd[:, e])
        if in_a_row < REJECTED:
            return reason
        return f"{reason}; {in_a_row} results in a row do not fit: the estimate may be wrong"


def _order(lab: LabAtCycle) -> tuple[int, int, float, float]:
    return lab.cycle, lab.estimate, lab.value, lab.variance


def _left_out(arrival: LabArrival, here: int, reason: str) -> LabOutcome:
    return LabOutcome(arrival, here, -1, np.nan, np.nan, np.nan, "left out", reason)


def _lab_bytes(outcome: LabOutcome) -> bytes:
    whole = np.array([outcome.arrived_cycle, outcome.counted_cycle, outcome.arrival.estimate], dtype="<i8")
    real = np.array([outcome.arrival.value, outcome.predicted, outcome.innovation, outcome.sd], dtype="<f8")
    return outcome.status.encode() + whole.tobytes() + real.tobytes()


__all__ = ["CHUNK", "Advance", "Came", "UnitRun", "slice_readings"]
