"""Cycles of a long history that stays in its file: the same bits as from one that is read whole, in bounded memory."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Protocol

import numpy as np

from connectors.history import History, TagSeries
from plant_models.specification import UnitSpec
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.assembly import assembled, between
from softsensor.service.rules import rules_of
from softsensor.service.sample_grid import cycle_times, first_cycle_time


class InParts(Protocol):
    """A history that comes in stretches, in order of time; times in UTC microseconds."""

    @property
    def first_time(self) -> int: ...

    @property
    def last_time(self) -> int: ...

    def parts(self) -> Iterator[History]:
        """The stretches."""
        ...


class _Ahead:
    """Readings that have been read and not yet been seen by a cycle, and the stretches still to come."""

    def __init__(self, history: InParts, tags: tuple[str, ...]) -> None:
        nothing = TagSeries(np.zeros(0, dtype=np.int64), np.zeros(0), np.zeros(0, dtype=np.int8))
        self._parts = history.parts()
        self._series = dict.fromkeys(tags, nothing)
        self._read_to: int | None = None

    def seen_by(self, after: int, upto: int) -> Mapping[str, TagSeries]:
        """The readings with after < time <= upto; those before are forgotten."""
        while self._read_to is None or self._read_to < upto:
            part = next(self._parts, None)
            if part is None:
                break
            for tag, series in self._series.items():
                self._series[tag] = _behind(between(series, after, _EVER), part.series[tag])
            self._read_to = part.last_time
        return {tag: between(series, after, upto) for tag, series in self._series.items()}


_EVER = 2**62


def _behind(one: TagSeries, other: TagSeries) -> TagSeries:
    return TagSeries(
        np.concatenate([one.times, other.times]),
        np.concatenate([one.values, other.values]),
        np.concatenate([one.qualities, other.qualities]),
    )


def assemble_long(spec: UnitSpec, history: InParts, block: int = 8192) -> Iterator[CycleReadings]:
    """As :func:`softsensor.service.assembly.assemble_blocks`, bit for bit, from a history in stretches.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    rules = rules_of(spec)
    state, ahead = rules.start(), _Ahead(history, rules.tags)
    first, span = first_cycle_time(history.first_time, rules.sample_time), block * rules.sample_time
    while first <= history.last_time:
        times = cycle_times(first, min(first + span - 1, history.last_time), rules.sample_time)
        events = ahead.seen_by(state.last_cycle, int(times[-1]))
        readings, state = assembled(rules, times, state, events)
        yield readings
        first += span
