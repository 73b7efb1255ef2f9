"""One tag's readings by source time, in arrays that grow at the end, take late ones in between, and forget the oldest."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from connectors.history import TagSeries
from softsensor.service.reading_rules import BAD, NEVER, TagState
from softsensor.service.rules import TagRule, mapped


class SeriesMemory:
    """Readings of strictly increasing times. 17 bytes each, twice that at most."""

    def __init__(self) -> None:
        self._times = np.empty(64, dtype=np.int64)
        self._values = np.empty(64)
        self._qualities = np.empty(64, dtype=np.int8)
        self._begin = self._end = 0

    def __len__(self) -> int:
        return self._end - self._begin

    def insert(self, series: TagSeries) -> None:
        """Add readings, in order of time; of one time the later arrival takes the earlier one's place."""
        if not len(series):
            return
        if len(self) and series.times[0] <= self._times[self._end - 1]:
            self._replace(joined(self._all(), series))
            return
        if len(series) == 1 and self._end < len(self._times):
            self._times[self._end], self._values[self._end] = series.times[0], series.values[0]
            self._qualities[self._end] = series.qualities[0]
            self._end += 1
            return
        self._make_room(len(series))
        place = slice(self._end, self._end + len(series))
        self._times[place], self._values[place] = series.times, series.values
        self._qualities[place] = series.qualities
        self._end += len(series)

    def holds(self, series: TagSeries) -> NDArray[np.bool_]:
        """Which of these readings are known, with the same value and quality."""
        mine = self._all()
        at = np.minimum(np.searchsorted(mine.times, series.times), max(len(mine) - 1, 0))
        if not len(mine):
            return np.zeros(len(series), dtype=np.bool_)
        equal = (mine.values[at] == series.values) | (np.isnan(mine.values[at]) & np.isnan(series.values))
        equal &= (mine.times[at] == series.times) & (mine.qualities[at] == series.qualities)
        return np.asarray(equal)

    def between(self, after: int, upto: int) -> TagSeries:
        """The readings with after < time <= upto."""
        mine = self._all()
        begin, end = np.searchsorted(mine.times, [after, upto], side="right")
        return TagSeries(mine.times[begin:end], mine.values[begin:end], mine.qualities[begin:end])

    def state_at(self, time: int, rule: TagRule) -> TagState:
        """What the cycle at ``time`` left behind, had it seen all of these readings up to it."""
        mine = self.between(NEVER, time)
        end = len(mine)
        if end == 0:
            return TagState()
        qualities = mapped(rule, mine)
        usable = (qualities < BAD) & np.isfinite(mine.values)
        newest = int(mine.times[end - 1])
        quality = int(qualities[end - 1]) if usable[-1] else max(int(qualities[end - 1]), BAD)
        state = TagState(newest, float(mine.values[end - 1]), quality, newest)
        if not usable.any():
            return state
        at = end - 1 - int(usable[::-1].argmax())
        return state._replace(
            usable_time=int(mine.times[at]),
            usable_value=float(mine.values[at]),
            usable_quality=int(qualities[at]),
        )

    def forget(self, before: int, rules: Sequence[TagRule]) -> None:
        """Let go of the readings before a time, but for the last of them and the last that is usable by all ``rules``."""
        if not len(self) or self._times[self._begin] >= before:
            return
        mine = self._all()
        last = int(np.searchsorted(mine.times, before, side="left")) - 1
        usable = (mine.qualities[: last + 1] < BAD) & np.isfinite(mine.values[: last + 1])
        for rule in rules:
            usable &= mapped(rule, mine)[: last + 1] < BAD
        if last > 0 and usable.any():
            last -= int(usable[::-1].argmax())
            self._begin += last

    def _all(self) -> TagSeries:
        place = slice(self._begin, self._end)
        return TagSeries(self._times[place], self._values[place], self._qualities[place])

    def _replace(self, series: TagSeries) -> None:
        self._begin, self._end = 0, len(series)
        size = max(2 * len(series), 64)
        self._times, self._values = np.empty(size, dtype=np.int64), np.empty(size)
        self._qualities = np.empty(size, dtype=np.int8)
        place = slice(0, len(series))
        self._times[place], self._values[place] = series.times, series.values
        self._qualities[place] = series.qualities

    def _make_room(self, count: int) -> None:
        if self._end + count <= len(self._times):
            return
        kept = self._all()
        self._replace(TagSeries(kept.times.copy(), kept.values.copy(), kept.qualities.copy()))
        if self._end + count > len(self._times):
            size = 2 * (self._end + count)
            self._times = np.resize(self._times, size)
            self._values = np.resize(self._values, size)
            self._qualities = np.resize(self._qualities, size)


def joined(one: TagSeries, other: TagSeries) -> TagSeries:
    """Both in the order of their times; of one time the reading of ``other``."""
    times = np.concatenate([other.times, one.times])
    unique, first = np.unique(times, return_index=True)
    return TagSeries(
        unique,
        np.concatenate([other.values, one.values])[first],
        np.concatenate([other.qualities, one.qualities])[first],
    )


def only(series: TagSeries, chosen: NDArray[np.bool_]) -> TagSeries:
    """Some of the readings."""
    return TagSeries(series.times[chosen], series.values[chosen], series.qualities[chosen])


def as_series(state: TagState) -> TagSeries:
    """The usable reading of a state; none where there is none."""
    if state.usable_time == NEVER:
        return TagSeries(np.zeros(0, dtype=np.int64), np.zeros(0), np.zeros(0, dtype=np.int8))
    return TagSeries(
        np.array([state.usable_time], dtype=np.int64),
        np.array([state.usable_value]),
        np.array([state.usable_quality], dtype=np.int8),
    )
