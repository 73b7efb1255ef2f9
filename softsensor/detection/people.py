"""What people decide about a unit's sensors and tests, and what follows at the cycle that takes it.

Pure: the service puts decisions before a cycle and stores them with the cycle's readings, so that a replay and a
restart come to the same.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from softsensor.detection.absorbed_faults import remembered
from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.flags import Exclusion, Flag, FlagBook, Note, Rest, RestSpell, time_words
from softsensor.detection.outcomes import LASTING, FollowUp, cleared
from softsensor.detection.state_of_tests import TestState

Act = Literal["put back", "leave out", "rest", "go on"]
ACTS: tuple[Act, ...] = ("put back", "leave out", "rest", "go on")


@dataclass(frozen=True, slots=True)
class Decision:
    """One person's word about a sensor or about the tests of the whole unit.

    :param number: its place in the records.
    :param act: put back (a sensor counts again), leave out (a sensor, for a time), rest (the unit's tests, for a
        time), go on (the tests, before that time is over).
    :param tag: the sensor; empty for the whole unit.
    :param flag: the flag that a put back answers; empty where it only ends a leaving out by a person.
    :param occasion: why the tests rest, such as start-up.
    :param seconds: how long, counted from the cycle that takes it; 0 where it has no time limit.
    """

    number: int
    act: Act
    tag: str
    flag: str
    occasion: str
    seconds: float
    actor: str
    reason: str


@dataclass(frozen=True, slots=True)
class Taken:
    """What became of a decision: the cycle that took it, until when it holds (UTC microseconds), why it had no effect."""

    decision: Decision
    cycle: int
    time: int
    until: int | None
    refusal: str = ""

    def as_bytes(self) -> bytes:
        """What the digest keeps of it."""
        d = self.decision
        words = "\x1f".join((d.act, d.tag, d.flag, d.occasion, self.refusal)).encode()
        return words + np.array([self.cycle, -1 if self.until is None else self.until], dtype="<i8").tobytes()


def take(
    design: DetectionDesign, outcome: FollowUp, cycle: int, time: int, decision: Decision
) -> tuple[FollowUp, Taken]:
    """Apply one decision before ``cycle``; one that does not fit changes nothing and says why."""
    if decision.act in ("rest", "go on"):
        return _about_the_tests(design, outcome, cycle, time, decision)
    tags = [item.tag for item in design.model.spec.sensors]
    if decision.tag not in tags:
        if decision.act == "put back" and decision.flag:
            return _put_back(outcome, cycle, time, (decision, -1))
        return outcome, Taken(decision, cycle, time, None, f"{decision.tag} is no sensor of the model")
    sensor = tags.index(decision.tag)
    if decision.act == "leave out":
        return _leave_out(design, outcome, cycle, time, (decision, sensor))
    return _put_back(outcome, cycle, time, (decision, sensor))


def _about_the_tests(
    design: DetectionDesign, outcome: FollowUp, cycle: int, time: int, decision: Decision
) -> tuple[FollowUp, Taken]:
    book = outcome.book
    if decision.act == "rest":
        length = _cycles(design, decision.seconds)
        until = time + length * design.sample_us
        text = f"{decision.occasion}: the tests rest until {time_words(until)}, the estimates go on; {_who(decision)}"
        rest = Rest(cycle + length, decision.occasion, time, _who(decision))
        outcome = _noted(outcome, replace(book, rest=rest), time, "rest", text)
        return _with_spell(outcome, rest, until), Taken(decision, cycle, time, until)
    if book.rest is None or not book.rested(cycle):
        return outcome, Taken(decision, cycle, time, None, "the tests were not at rest")
    text = f"{book.rest.occasion}: the rest of the tests is ended; {_who(decision)}"
    outcome = _noted(outcome, replace(book, rest=replace(book.rest, until=cycle)), time, "rest", text)
    return _with_spell(outcome, book.rest, time), Taken(decision, cycle, time, None)


def _with_spell(outcome: FollowUp, rest: Rest, until: int) -> FollowUp:
    return replace(outcome, rests=(*outcome.rests, RestSpell(rest.occasion, "", rest.since, until, rest.why)))


def _leave_out(
    design: DetectionDesign, outcome: FollowUp, cycle: int, time: int, what: tuple[Decision, int]
) -> tuple[FollowUp, Taken]:
    decision, sensor = what
    length = _cycles(design, decision.seconds)
    until = time + length * design.sample_us
    kept = tuple(_cut(item, sensor, cycle, people_only=True) for item in outcome.book.exclusions)
    book = replace(outcome.book, exclusions=(*kept, Exclusion(sensor, cycle, cycle + length, by_person=True)))
    text = f"{decision.tag} is left out until {time_words(until)}; {_who(decision)}"
    return _noted(outcome, book, time, "left out by a person", text), Taken(decision, cycle, time, until)


def _put_back(outcome: FollowUp, cycle: int, time: int, what: tuple[Decision, int]) -> tuple[FollowUp, Taken]:
    """A sensor that was left out counts again; a flag that a person has answered closes, also where its instrument was in
    use all the time (sensor -1: no sensor of the model, an input's instrument for one).
    """
    decision, sensor = what
    before = outcome.book
    people_only = not decision.flag
    exclusions = tuple(_cut(item, sensor, cycle, people_only) for item in before.exclusions)
    answered = () if people_only else tuple(flag for flag in before.open if _answers(decision, flag))
    if exclusions == before.exclusions and not answered:
        return outcome, Taken(decision, cycle, time, None, f"{decision.tag} was in use already")
    book = replace(before, exclusions=exclusions)
    if exclusions != before.exclusions:
        outcome = _noted(outcome, book, time, "put back", f"{decision.tag} is put back; {_who(decision)}")
    else:
        text = f"{decision.tag}: its flag is closed by what was found; {_who(decision)}"
        outcome = _noted(outcome, book, time, "flag answered", text)
    followed = tuple(flag for flag in answered if not _was_left_out(before, sensor, cycle, flag))
    for flag in answered:
        outcome = cleared(outcome, flag, time)
    outcome = remembered(outcome, tuple(flag.closed(time) for flag in followed), time)
    return outcome, Taken(decision, cycle, time, None)


def _answers(decision: Decision, flag: Flag) -> bool:
    return flag.tag == decision.tag and flag.kind in LASTING


def _was_left_out(book: FlagBook, sensor: int, cycle: int, flag: Flag) -> bool:
    """Was the error kept from the estimate? Not where a person's leaving out, for the work itself, is all there was."""
    return flag.flag not in book.absorbed and any(
        item.sensor == sensor and item.covers(cycle) and not item.by_person for item in book.exclusions
    )


def _cut(item: Exclusion, sensor: int, cycle: int, people_only: bool) -> Exclusion:
    """The exclusion, ended at ``cycle`` where it is this sensor's and still holds."""
    if item.sensor != sensor or not item.covers(cycle) or (people_only and not item.by_person):
        return item
    return replace(item, until=cycle)


def next_end(book: FlagBook, cycle: int) -> int:
    """Cycles from ``cycle`` to the next one at which a rest, a leaving out or an unsteady beginning ends; large where
    none does.
    """
    ends = [item.until for item in book.exclusions if item.until is not None]
    ends += [] if book.rest is None else [book.rest.until]
    ends += [state.until for state in book.states if state.until is not None]
    ends += [book.beginning.until] if book.beginning is not None and book.beginning.unsteady else []
    return min((end - cycle for end in ends if end > cycle), default=2**62)


def ended(design: DetectionDesign, book: FlagBook, tests: TestState, cycle: int, time: int) -> FollowUp:
    """What ends with this cycle: sensors that count again, a rest that is over. ``tests`` is a work array.

    All sums start anew: what they had added up was seen without the sensor, or not at all.
    """
    outcome = FollowUp(book)
    back = sorted({item.sensor for item in book.exclusions if item.until == cycle})
    for sensor in back:
        if not book.excluded(sensor, cycle):
            _forget_readings(design, book, tests, sensor)
            tag = design.model.spec.sensors[sensor].tag
            outcome = _noted(outcome, outcome.book, time, "put back", f"{tag} counts again")
    outcome, over = _rests_over(outcome, cycle, time)
    if over:
        for sensor in range(design.kernel.n_sensors):
            tests.repeats[sensor], tests.run_probability[sensor] = 0, 1.0
    if outcome.notes or any(flag.cleared == time for flag in book.answered):
        tests.restart_sums(cycle)
        if over and not book.unsteady(cycle) and cycle >= tests.settling_until[0]:
            tests.give_head_start(design.tests.interval * design.tests.armed[:, None])
        outcome = replace(outcome, book=replace(outcome.book, episode=None))
    return outcome


def _rests_over(outcome: FollowUp, cycle: int, time: int) -> tuple[FollowUp, bool]:
    """Forget rests and states that end at this cycle; whether the unit's tests go on with it."""
    book = outcome.book
    ending = [book.rest.occasion] if book.rest is not None and book.rest.until == cycle else []
    ending += [state.name for state in book.states if state.until == cycle]
    if not ending:
        return outcome, False
    kept = tuple(state for state in book.states if state.until != cycle)
    rest = book.rest if book.rested(cycle) else None
    after = replace(book, rest=rest, states=kept)
    still = [state.name for state in kept] + ([] if rest is None else [rest.occasion])
    what = f"they still rest: {', '.join(still)}" if still else "the tests go on"
    text = f"{', '.join(ending)}: {what}"
    return _noted(outcome, after, time, "rest", text), not still


def _forget_readings(design: DetectionDesign, book: FlagBook, tests: TestState, sensor: int) -> None:
    """What was seen of a sensor while it was worked on is no evidence, unless a flag stands on it."""
    tag = design.model.spec.sensors[sensor].tag
    tests.repeats[sensor], tests.run_probability[sensor] = 0, 1.0
    if book.find(tag, ("stuck",)) is None:
        tests.stuck[sensor] = 0
    if book.find(tag, ("lost",)) is None:
        tests.lost[sensor] = tests.missing[sensor] = 0


def _noted(outcome: FollowUp, book: FlagBook, time: int, kind: str, text: str) -> FollowUp:
    return replace(outcome, book=book, notes=(*outcome.notes, Note(time, kind, text)))


def _cycles(design: DetectionDesign, seconds: float) -> int:
    return max(1, math.ceil(round(seconds * 1e6) / design.sample_us))


def _who(decision: Decision) -> str:
    return f"{decision.actor}: {decision.reason}"
