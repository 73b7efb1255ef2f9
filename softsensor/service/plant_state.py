"""From tags and limits to states of the plant: when each begins and ends, for recorded histories and live plants alike.

The rules, with t a cycle's time:

- A tag has its last value at or before t that was finite and not Bad. Without one its state does not hold.
- A state holds at t where the condition is met then and has been met for ``lasting`` at least, counted from the source
  time of the reading that met it first. It ends at the first cycle at which the condition is met no longer.

Every decision that needs a clock is taken here, against the cycle's own time, and never again.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from connectors.history import TagSeries
from connectors.readings import Quality, Reading
from softsensor.detection.plant_states import StateChange
from softsensor.service.reading_rules import NEVER

NO_READINGS = TagSeries(
    np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.float64), np.zeros(0, dtype=np.int8)
)


@dataclass(frozen=True, slots=True)
class StateRule:
    """One state of the plant; times in microseconds.

    :param below, above, equals: limits of the tag's value. With both ``below`` and ``above`` the condition is a value
        between them where ``above`` is the smaller one, else a value outside.
    :param lasting: how long the condition must be met before the state holds.
    :param settle: how long the tests stay at rest after it has ended.
    :param sensor: the sensor that alone is concerned; empty for the whole unit.
    """

    name: str
    tag: str
    below: float | None = None
    above: float | None = None
    equals: float | None = None
    lasting: int = 0
    settle: int = 0
    sensor: str = ""
    unit: str = ""

    @property
    def condition(self) -> str:
        """The condition in words."""
        limits = (("above", self.above), ("below", self.below), ("at", self.equals))
        if self.above is not None and self.below is not None:
            word = "and" if self.above < self.below else "or"
            text = f"above {self.above:g} {word} below {self.below:g}"
        else:
            text = next(f"{word} {value:g}" for word, value in limits if value is not None)
        return f"{self.tag} {text} {self.unit}".strip()

    def met(self, values: NDArray[np.float64]) -> NDArray[np.bool_]:
        """Which values meet the condition."""
        if self.equals is not None:
            return np.asarray(values == self.equals)
        low = np.zeros(len(values), dtype=np.bool_) if self.below is None else values < self.below
        high = np.zeros(len(values), dtype=np.bool_) if self.above is None else values > self.above
        between = self.above is not None and self.below is not None and self.above < self.below
        return low & high if between else low | high


class Followed(NamedTuple):
    """What is carried on for one rule: the last usable reading, since when its condition is (not) met, and whether the
    state held at the last cycle. Times are UTC microseconds.
    """

    time: int = NEVER
    value: float = float("nan")
    met: bool = False
    since: int = NEVER
    holds: bool = False


def follow(
    rule: StateRule, before: Followed, new: TagSeries, cycles: NDArray[np.int64]
) -> tuple[list[tuple[int, StateChange]], Followed]:
    """Changes of one state within ``cycles`` (N,), each with its row, and what is carried on.

    :param new: readings that ``before`` has not seen, in increasing time, none after the last cycle.
    """
    usable = (new.times > before.time) & np.isfinite(new.values) & (new.qualities < int(Quality.BAD))
    times = np.concatenate([[before.time], new.times[usable]]).astype(np.int64)
    values = np.concatenate([[before.value], new.values[usable]])
    met = np.concatenate([[before.met], rule.met(values[1:])])
    turned = np.concatenate([[False], met[1:] != met[:-1]])
    turns = np.where(turned, times, before.since)
    since = turns[np.maximum.accumulate(np.where(turned, np.arange(len(met)), 0))]
    at = np.searchsorted(times, cycles, side="right") - 1
    holds = met[at]
    holds[holds] = cycles[holds] - rule.lasting >= since[at[holds]]
    changed = np.flatnonzero(holds != np.concatenate([[before.holds], holds[:-1]]))
    changes = [
        (int(row), _change(rule, bool(holds[row]), float(values[at[row]]), int(since[at[row]])))
        for row in changed
    ]
    last = bool(holds[-1]) if len(holds) else before.holds
    return changes, Followed(int(times[-1]), float(values[-1]), bool(met[-1]), int(since[-1]), last)


def _change(rule: StateRule, begins: bool, value: float, since: int) -> StateChange:
    return StateChange(
        rule.name, rule.condition, rule.sensor, begins, value, rule.unit, since, rule.settle * 1e-6
    )


class PlantStates:
    """Follows all states of a unit. Feed it readings with :meth:`accept`; ask it once for each cycle, in order."""

    def __init__(self, rules: Sequence[StateRule]) -> None:
        self._rules = tuple(rules)
        self._followed = {rule: Followed() for rule in self._rules}
        self._waiting: dict[str, dict[int, Reading]] = {rule.tag: {} for rule in self._rules}
        self._gone: list[StateChange] = []

    def accept(self, reading: Reading) -> None:
        """Take one reading; one of a tag that no state asks for is left alone."""
        if reading.tag in self._waiting:
            self._waiting[reading.tag][reading.time] = reading

    def resume(self, held: Collection[tuple[str, str]], time: int) -> None:
        """Go on after a restart at ``time`` with states that held, by key and sensor; one that is no longer asked for
        ends with the next cycle. How long a condition has been met that did not hold long enough yet is counted anew.
        """
        known = {(f"{rule.name}: {rule.condition}", rule.sensor): rule for rule in self._rules}
        for key, sensor in held:
            rule = known.get((key, sensor))
            if rule is not None:
                self._followed[rule] = Followed(met=True, since=time - rule.lasting, holds=True)
            else:
                name, _, condition = key.partition(": ")
                self._gone.append(StateChange(name, condition, sensor, False, float("nan"), "", time, 0.0))

    def changes_at(self, time: int) -> list[StateChange]:
        """States that begin or end at the cycle at ``time``; readings up to it are then forgotten."""
        events = {tag: _taken(waiting, time) for tag, waiting in self._waiting.items()}
        changes, self._gone = self._gone, []
        for rule in self._rules:
            cycle = np.array([time], dtype=np.int64)
            found, self._followed[rule] = follow(rule, self._followed[rule], events[rule.tag], cycle)
            changes += [change for _, change in found]
        return changes


def recorded_changes(
    rules: Sequence[StateRule], series: Mapping[str, TagSeries], cycles: NDArray[np.int64]
) -> Iterator[tuple[int, StateChange]]:
    """Changes of all states over recorded cycles (N,), each with the time of its cycle, in the order of a live run."""
    found: list[tuple[int, int, StateChange]] = []
    for number, rule in enumerate(rules):
        changes, _ = follow(rule, Followed(), series.get(rule.tag, NO_READINGS), cycles)
        found += [(row, number, change) for row, change in changes]
    for row, _, change in sorted(found, key=lambda item: item[:2]):
        yield int(cycles[row]), change


def _taken(waiting: dict[int, Reading], upto: int) -> TagSeries:
    times = sorted(time for time in waiting if time <= upto)
    taken = [waiting.pop(time) for time in times]
    return TagSeries(
        np.array(times, dtype=np.int64),
        np.array([item.value for item in taken], dtype=np.float64),
        np.array([int(item.quality) for item in taken], dtype=np.int8),
    )
