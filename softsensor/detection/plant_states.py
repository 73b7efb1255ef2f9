"""States of the plant in which its model does not hold, and what follows at the cycle that learns of them.

Pure: the service decides from tags and limits before a cycle whether a state holds, and stores the change with the
cycle's readings, so that a replay and a restart come to the same.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.flags import Exclusion, HeldState, Note, RestSpell, time_words
from softsensor.detection.outcomes import FollowUp

MODEL_HOLDS = ("grade change", "maintenance")
"""States in which the estimates stay as good as their inputs say; in any other they are Uncertain."""


@dataclass(frozen=True, slots=True)
class StateChange:
    """A state begins or ends.

    :param name: off, start-up, shutdown, grade change, maintenance, or a word of the site's own.
    :param condition: the tag and its limit, such as ``FI2103 below 2``.
    :param sensor: the sensor that alone is concerned; empty for the whole unit.
    :param value: the tag's value now; nan where none has been seen.
    :param since: UTC microseconds from which on the condition has been met, or not been met.
    :param settle: seconds that the tests stay at rest after the end.
    """

    name: str
    condition: str
    sensor: str
    begins: bool
    value: float
    unit: str
    since: int
    settle: float

    @property
    def key(self) -> str:
        """What tells the state from the others of its unit."""
        return f"{self.name}: {self.condition}"

    @property
    def seen(self) -> str:
        """The value that decided, in words."""
        value = "no value" if math.isnan(self.value) else f"{self.value:.6g} {self.unit}".strip()
        return f"{value} since {time_words(self.since)}"

    def as_bytes(self, cycle: int) -> bytes:
        """What the digest keeps of it."""
        words = "\x1f".join((self.name, self.condition, self.sensor, "begins" if self.begins else "ends"))
        return words.encode() + np.array([cycle, self.since], dtype="<i8").tobytes()


def change_state(
    design: DetectionDesign, outcome: FollowUp, cycle: int, time: int, change: StateChange
) -> FollowUp:
    """Apply one change before ``cycle``. A sensor's own state leaves it out of the estimate, as work on it does."""
    tags = [item.tag for item in design.model.spec.sensors]
    if not change.sensor:
        return _unit_state(design, outcome, cycle, time, change)
    return _sensor_state(design, outcome, cycle, time, (change, tags.index(change.sensor)))


def _settled_at(design: DetectionDesign, cycle: int, time: int, settle: float) -> tuple[int, int]:
    """Cycle and time at which the tests go on."""
    length = math.ceil(round(settle * 1e6) / design.sample_us)
    return cycle + length, time + length * design.sample_us


def _unit_state(
    design: DetectionDesign, outcome: FollowUp, cycle: int, time: int, change: StateChange
) -> FollowUp:
    book = outcome.book
    held = next((state for state in book.states if state.key == change.key), None)
    others = tuple(state for state in book.states if state.key != change.key)
    if change.begins:
        uncertain = change.name not in MODEL_HOLDS
        why = f"{change.condition}: {change.seen}"
        begun = HeldState(
            change.name, change.condition, why, time if held is None else held.since, None, uncertain
        )
        text = f"{change.key}: {change.seen}: the tests of innovations rest"
        text += ", the estimates are Uncertain" if uncertain else ", the estimates go on"
        book = replace(book, states=(*others, begun))
        return _noted(outcome, replace(outcome, book=book), time, text, _spell(begun, None))
    if held is None:
        return outcome
    until, until_time = _settled_at(design, cycle, time, change.settle)
    text = f"{change.name} has ended: {change.condition} no longer, {change.seen}"
    if until > cycle:
        text += f"; the tests of innovations rest until {time_words(until_time)}"
    ended = replace(held, until=until)
    book = replace(book, states=(*others, ended))
    return _noted(outcome, replace(outcome, book=book), time, text, _spell(ended, until_time))


def _sensor_state(
    design: DetectionDesign, outcome: FollowUp, cycle: int, time: int, what: tuple[StateChange, int]
) -> FollowUp:
    change, sensor = what
    book = outcome.book
    running = next(
        (
            item
            for item in book.exclusions
            if item.sensor == sensor and item.state == change.key and item.covers(cycle)
        ),
        None,
    )
    rest = tuple(item for item in book.exclusions if item is not running)
    if change.begins:
        since = cycle if running is None else running.since
        begun = Exclusion(sensor, since, None, by_person=True, state=change.key)
        text = f"{change.key}: {change.seen}: {change.sensor} is left out and its tests rest"
        spell = RestSpell(change.key, change.sensor, _time_of(design, since, cycle, time), None, change.seen)
        book = replace(book, exclusions=(*rest, begun))
        return _noted(outcome, replace(outcome, book=book), time, text, spell)
    if running is None:
        return outcome
    until, until_time = _settled_at(design, cycle, time, change.settle)
    text = f"{change.name} has ended: {change.condition} no longer, {change.seen}"
    if until > cycle:
        text += f"; {change.sensor} is left out until {time_words(until_time)}"
    since = _time_of(design, running.since, cycle, time)
    spell = RestSpell(change.key, change.sensor, since, until_time, change.seen)
    book = replace(book, exclusions=(*rest, replace(running, until=until)))
    return _noted(outcome, replace(outcome, book=book), time, text, spell)


def _time_of(design: DetectionDesign, cycle: int, here: int, time: int) -> int:
    return time + (cycle - here) * design.sample_us


def _spell(state: HeldState, until: int | None) -> RestSpell:
    return RestSpell(state.key, "", state.since, until, state.why)


def _noted(before: FollowUp, after: FollowUp, time: int, text: str, spell: RestSpell) -> FollowUp:
    note = Note(time, "rest", text)
    return replace(after, notes=(*before.notes, note), rests=(*before.rests, spell))
