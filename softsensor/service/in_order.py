"""What came late, put where it belongs: the reading rules once more, over readings in the order of their source times.

A reading whose cycle has run is late. One that is the newest of its tag and not too old counts in the coming cycle, as
ever; every other one fills a gap: it belongs to its own cycle, unless that has heard of the tag in time, and to those that
would have gone on seeing it. (A server whose clock was set back must not write over the past.) What these cycles see
then is worked out here, by the same rules and compiled code as for readings in time, and handed to the estimator to go
back and forward again with.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from connectors.history import TagSeries
from softsensor.estimation.late_readings import Kind, LateReadings, UnusedReadings
from softsensor.service.reading_rules import BAD, NEVER, input_values, sensor_readings
from softsensor.service.rules import AssemblyState, TagRule, UnitRules, mapped
from softsensor.service.series_memory import SeriesMemory, as_series, only

Late = LateReadings | UnusedReadings
FORGET_EVERY = 64
"""Cycles between two looks at what lies beyond the horizon."""


class InOrder:
    """A unit's readings of the last ``horizon`` microseconds, by source time.

    :param state: what was known when this began; nothing is known of the time before.
    """

    def __init__(self, rules: UnitRules, state: AssemblyState, horizon: int) -> None:
        self._rules = rules
        self._horizon = horizon
        self._since = state.last_cycle
        self._memory = {tag: SeriesMemory() for tag in rules.tags}
        self._newest: dict[str, tuple[int, float]] = {}
        """Time and value of each tag's newest reading."""
        self._cycles = 0
        self._filled: dict[str, set[int]] = {tag: set() for tag in rules.tags}
        self._told: set[str] = set()
        self._unheard = set(rules.tags) if self._since != NEVER else set[str]()
        for rule, known in zip(rules.inputs + rules.sensors, state.inputs + state.sensors, strict=True):
            self._newest[rule.tag] = (known.newest_time, known.newest_value)
            if known.usable_time != NEVER:
                self._memory[rule.tag].insert(as_series(known))

    def remember(self, events: Mapping[str, TagSeries]) -> None:
        """Readings that came in time."""
        for tag, series in events.items():
            if len(series):
                self._memory[tag].insert(series)
                self._note_newest(tag, series)

    def take(self, events: Mapping[str, TagSeries], cycle: int, last: int) -> tuple[Late, ...]:
        """Readings that have come before the cycle at ``cycle``, the one before it at ``last``; the late ones among them.

        :param events: by tag, in the order of their times, none after ``cycle``.
        """
        found: list[Late] = []
        for tag, series in events.items():
            if not len(series):
                continue
            if series.times[0] <= last:
                found += self._late_of(tag, series, cycle, last)
                continue
            self._memory[tag].insert(self._thinned(tag, series))
            self._newest[tag] = (int(series.times[-1]), float(series.values[-1]))
            self._unheard.discard(tag)
            self._told.discard(tag)
        self._cycles += 1
        if self._cycles % FORGET_EVERY == 0:
            self._forget(cycle)
        return tuple(found)

    def _late_of(self, tag: str, series: TagSeries, cycle: int, last: int) -> list[Late]:
        late = self._set_apart(tag, series, cycle, last)
        own = self._own_cycles(late, last)
        gap = np.array(
            [at <= self._since or not self._heard_in_time(tag, int(at)) for at in own], dtype=np.bool_
        )
        found = self._over_the_past(tag, only(late, ~gap), last < int(series.times[-1]))
        late, own = only(late, gap), own[gap]
        begun = own > self._since
        recent = own >= cycle - self._horizon
        found += [
            UnusedReadings(tag, part.times, part.values, part.qualities, reason)
            for part, reason in (
                (only(late, begun & ~recent), f"the estimate goes back {self._horizon * 1e-6:.0f} s at most"),
                (only(late, ~begun), "they are from before this service was started"),
            )
            if len(part)
        ]
        usable = begun & recent
        if usable.any():
            self._memory[tag].insert(only(late, usable))
            limit = cycle - 2 * self._horizon
            self._filled[tag] = {time for time in self._filled[tag] if time > limit}
            self._filled[tag].update(late.times[usable].tolist())
            found += self._seen_in_order(tag, int(own[usable].min()), last)
        return found

    def _own_cycles(self, late: TagSeries, last: int) -> NDArray[np.int64]:
        step = self._rules.sample_time
        return last - (last - late.times) // step * step

    def _heard_in_time(self, tag: str, cycle: int) -> bool:
        """Did a usable reading of the tag come in time for a cycle that has run?"""
        part = self._memory[tag].between(cycle - self._rules.sample_time, cycle)
        usable = part.times[(part.qualities < BAD) & np.isfinite(part.values)].tolist()
        return any(time not in self._filled[tag] for time in usable)

    def _over_the_past(self, tag: str, late: TagSeries, in_time_again: bool) -> list[Late]:
        """Told once, until readings come in time again."""
        if in_time_again:
            self._told.discard(tag)
        if not len(late) or tag in self._told:
            return []
        self._told.add(tag)
        reason = "their cycles have a reading already; are the clocks of plant and service right?"
        return [UnusedReadings(tag, late.times, late.values, late.qualities, reason)]

    def _set_apart(self, tag: str, series: TagSeries, cycle: int, last: int) -> TagSeries:
        """The late readings that are news and do not count in the coming cycle; the others are remembered."""
        late = series.times <= last
        fresh = tag in self._unheard
        self._unheard.discard(tag)
        if fresh and late[0]:
            late[0] = False  # after a start a server first shows its present value, however old
            series, late = only(series, _but_first(series)), late[1:]
        before = self._newest[tag]
        if len(series) and late.all():
            time = int(series.times[-1])
            if time > before[0] and cycle - time <= self._max_age(tag):
                newest = only(series, np.arange(len(series)) == len(series) - 1)
                self._memory[tag].insert(
                    TagSeries(np.array([cycle], dtype=np.int64), newest.values, newest.qualities)
                )
                late[-1] = False
                self._note_newest(tag, newest)
                return self._news(tag, only(series, late), before)
        self._memory[tag].insert(self._thinned(tag, only(series, ~late)))
        self._note_newest(tag, series)
        return self._news(tag, only(series, late), before)

    def _news(self, tag: str, late: TagSeries, newest: tuple[int, float]) -> TagSeries:
        """Without what a server shows again: readings that are known already."""
        known = self._memory[tag].holds(late)
        again = (late.times == newest[0]) & _same(late.values, newest[1])
        return only(late, ~(known | again))

    def _note_newest(self, tag: str, series: TagSeries) -> None:
        if len(series) and series.times[-1] > self._newest[tag][0]:
            self._newest[tag] = (int(series.times[-1]), float(series.values[-1]))

    def _rules_of(self, tag: str) -> list[tuple[bool, int, TagRule]]:
        """Whether it is a sensor's, the column, and the rule, for each place that a tag has."""
        found = [(False, j, rule) for j, rule in enumerate(self._rules.inputs) if rule.tag == tag]
        return found + [(True, j, rule) for j, rule in enumerate(self._rules.sensors) if rule.tag == tag]

    def _thinned(self, tag: str, series: TagSeries) -> TagSeries:
        """What one cycle's rules can see of its readings: the newest, and the newest that is usable."""
        if len(series) < 2 or any(rule.transform is not None for _, _, rule in self._rules_of(tag)):
            return series
        chosen = np.zeros(len(series), dtype=np.bool_)
        chosen[-1] = True
        usable = np.flatnonzero((series.qualities < BAD) & np.isfinite(series.values))
        if len(usable):
            chosen[usable[-1]] = True
        return only(series, chosen)

    def _max_age(self, tag: str) -> int:
        return max(rule.max_age for _, _, rule in self._rules_of(tag))

    def _seen_in_order(self, tag: str, first: int, last: int) -> list[LateReadings]:
        """What the cycles from ``first`` to ``last`` see of a tag by all that is known now."""
        step = self._rules.sample_time
        times = np.arange(first, last + 1, step, dtype=np.int64)
        memory = self._memory[tag]
        new = memory.between(first - step, last)
        found = []
        for is_sensor, column, rule in self._rules_of(tag):
            values = np.empty(len(times))
            qualities = np.empty(len(times), dtype=np.int8)
            before = memory.state_at(first - step, rule)
            events = (new.times, new.values, mapped(rule, new), times, rule.max_age)
            if is_sensor:
                sensor_readings(*events, rule.counts_once, before, values, qualities)
            else:
                input_values(*events, before, values, qualities)
            kind: Kind = "sensor" if is_sensor else "input"
            found.append(LateReadings(tag, kind, column, times, values, qualities))
        return found

    def _forget(self, cycle: int) -> None:
        for tag, memory in self._memory.items():
            rules = [rule for _, _, rule in self._rules_of(tag)]
            memory.forget(cycle - self._horizon - self._rules.sample_time, rules)


def _but_first(series: TagSeries) -> NDArray[np.bool_]:
    return np.arange(len(series)) > 0


def _same(values: NDArray[np.float64], value: float) -> NDArray[np.bool_]:
    return values == value if value == value else np.isnan(values)
