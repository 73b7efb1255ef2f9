"""From readings to what each cycle sees: the one set of rules, for recorded histories and live plants alike.

The rules, with t a cycle's time:

- A sensor's reading is its newest one at or before t. It counts while it is no older than ``max_age`` (three
  sample times unless the tag says otherwise) and in one cycle only; a sensor reported on change gives its
  value again until it changes, limited only by a ``max_age`` of its own. Bad, or not finite: no reading.
  Uncertain: a reading, marked. Outside the domain of the tag's transform: no reading, marked so.
- An input holds its last value that was finite, not Bad, and one that its transform can take. Older than
  ``max_age`` it is still held, and marked.

Every decision that needs a clock is taken here, against the cycle's own time, and never again.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
from numpy.typing import NDArray

from connectors.history import History, LateRows, TagSeries
from connectors.readings import Reading
from plant_models.specification import UnitSpec
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.in_order import InOrder, Late
from softsensor.service.reading_rules import NEVER, TagState, input_values, sensor_readings
from softsensor.service.rules import NO_LIMIT, AssemblyState, TagRule, UnitRules, mapped, rules_of
from softsensor.service.sample_grid import MICROSECONDS, cycle_times, first_cycle_time
from softsensor.service.series_memory import joined

DEFAULT_HORIZON_S = 7 * 86400.0
"""How late results and readings may come where the model file does not say."""
__all__ = [
    "DEFAULT_HORIZON_S",
    "NO_LIMIT",
    "AssemblyState",
    "LiveAssembly",
    "TagRule",
    "UnitRules",
    "assemble_blocks",
    "assemble_history",
    "assemble_with_late",
    "assembled",
    "between",
    "history_cycles",
    "late_horizon",
    "rules_of",
]


def assemble_history(spec: UnitSpec, history: History) -> CycleReadings:
    """What every cycle of a history sees, from the first at or after its first row to its last row.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    rules = rules_of(spec)
    return assembled(rules, _times_of(rules, history), rules.start(), history.series)[0]


def assemble_blocks(spec: UnitSpec, history: History, block: int = 8192) -> Iterator[CycleReadings]:
    """As :func:`assemble_history`, bit for bit, ``block`` cycles at a time, for histories that fill memory.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    if block < 1:
        raise ValueError("a block has at least one cycle")
    rules = rules_of(spec)
    times = _times_of(rules, history)
    state = rules.start()
    for begin in range(0, len(times), block):
        part = times[begin : begin + block]
        events = {tag: between(history.series[tag], state.last_cycle, int(part[-1])) for tag in rules.tags}
        readings, state = assembled(rules, part, state, events)
        yield readings


def assemble_with_late(
    spec: UnitSpec, history: History, late: LateRows, block: int = 8192
) -> Iterator[tuple[CycleReadings, tuple[Late, ...]]]:
    """As :func:`assemble_blocks`, with readings that came late; blocks end before the cycles that learn of them.

    :return: cycles, and before the first of them what had come late and where it belongs.
    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    rules = rules_of(spec)
    times, state = _times_of(rules, history), rules.start()
    horizon = spec.late_horizon or max(DEFAULT_HORIZON_S, late.longest + spec.sample_time)
    in_order = InOrder(rules, state, round(horizon * MICROSECONDS))
    learns = np.searchsorted(times, late.arrived, side="left")
    row = 0
    while row < len(times):
        begin, end = np.searchsorted(learns, [row, row + 1], side="left")
        coming = int(learns[begin]) if begin < len(learns) else len(times)
        stop = row + 1 if end > begin else min(row + block, coming, len(times))
        upto = int(times[stop - 1])
        events = {tag: between(history.series[tag], state.last_cycle, upto) for tag in rules.tags}
        found: tuple[Late, ...] = ()
        if end > begin:
            events = {tag: joined(series, _rows_of(late, tag, begin, end)) for tag, series in events.items()}
            found = in_order.take(events, upto, state.last_cycle)
        else:
            in_order.remember(events)
        readings, state = assembled(rules, times[row:stop], state, events)
        yield readings, found
        row = stop


def _rows_of(late: LateRows, tag: str, begin: int, end: int) -> TagSeries:
    """Late readings of one tag in the order of their times; of one time the last that arrived."""
    newest_first = begin + np.flatnonzero(late.tag_index[begin:end] == late.tags.index(tag))[::-1]
    times, first = np.unique(late.times[newest_first], return_index=True)
    chosen = newest_first[first]
    return TagSeries(times, late.values[chosen], late.qualities[chosen])


def history_cycles(spec: UnitSpec, history: History) -> NDArray[np.int64]:
    """The times of the cycles within a history, UTC microseconds.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    return _times_of(rules_of(spec), history)


class LiveAssembly:
    """Collects readings in any order of arrival and gives each cycle what it sees.

    Readings that arrive before their cycle is asked for give the same bits as :func:`assemble_history`. One
    that arrives after it counts in the next cycle, if it is the newest and not too old by then; every other one
    belongs to its own cycle, and :attr:`late` says what the past cycles would have seen. Two readings of one tag
    with the same source time are one: the later arrival replaces the earlier.

    :param state: an earlier run's :attr:`state`, to go on from after a restart.
    """

    def __init__(self, spec: UnitSpec, state: AssemblyState | None = None) -> None:
        self._rules = rules_of(spec)
        self._state = self._rules.start() if state is None else state
        self._in_order = InOrder(self._rules, self._state, round(late_horizon(spec) * MICROSECONDS))
        self.late: tuple[Late, ...] = ()
        """What has come too late for its own cycle, as of the last cycle asked for."""
        self._waiting: dict[str, dict[int, tuple[float, int]]] = {tag: {} for tag in self._rules.tags}
        self._watched = tuple(
            rule.tag for rule in self._rules.inputs + self._rules.sensors if rule.counts_once
        )
        carried = zip(
            self._rules.inputs + self._rules.sensors,
            self._state.inputs + self._state.sensors,
            strict=True,
        )
        self._seen = {rule.tag: item.newest_time for rule, item in carried}

    @property
    def state(self) -> AssemblyState:
        """What is carried from cycle to cycle, as of the last cycle asked for."""
        return self._state

    @property
    def waiting(self) -> int:
        """How many readings have been accepted and not yet been seen by a cycle."""
        return sum(len(readings) for readings in self._waiting.values())

    def accept(self, reading: Reading) -> None:
        """Take one reading; one of a tag that the unit does not have is left alone."""
        waiting = self._waiting.get(reading.tag)
        if waiting is None:
            return
        waiting[reading.time] = (reading.value, int(reading.quality))
        self._seen[reading.tag] = max(self._seen[reading.tag], reading.time)

    def complete_to(self) -> int:
        """The time up to which every tag not reported on change has been seen; NEVER before each has been."""
        return min((self._seen[tag] for tag in self._watched), default=NEVER)

    def readings_at(self, cycle_time: int) -> CycleReadings:
        """What the cycle at ``cycle_time`` sees, as one row; what it has seen is then forgotten.

        :raises ValueError: the cycle is not later than the one before.
        """
        if cycle_time <= self._state.last_cycle:
            raise ValueError(f"cycle {cycle_time} is not later than {self._state.last_cycle}")
        events = {tag: _take_until(waiting, cycle_time) for tag, waiting in self._waiting.items()}
        self.late = self._in_order.take(events, cycle_time, self._state.last_cycle)
        times = np.array([cycle_time], dtype=np.int64)
        readings, self._state = assembled(self._rules, times, self._state, events)
        return readings


def late_horizon(spec: UnitSpec) -> float:
    """How late results and readings may come, in seconds."""
    return DEFAULT_HORIZON_S if spec.late_horizon is None else spec.late_horizon


def assembled(
    rules: UnitRules, times: NDArray[np.int64], state: AssemblyState, events: Mapping[str, TagSeries]
) -> tuple[CycleReadings, AssemblyState]:
    """Run every tag's rule over the cycles ``times`` (N,); ``events`` are those ``state`` has not seen."""
    count = len(times)
    u, u_quality = _blank(count, len(rules.inputs))
    y, y_quality = _blank(count, len(rules.sensors))
    inputs, sensors = [], []
    for j, rule in enumerate(rules.inputs):
        new = events[rule.tag]
        arguments = (new.times, new.values, mapped(rule, new), times, rule.max_age)
        inputs.append(TagState(*input_values(*arguments, state.inputs[j], u[:, j], u_quality[:, j])))
    for j, rule in enumerate(rules.sensors):
        new = events[rule.tag]
        arguments = (new.times, new.values, mapped(rule, new), times, rule.max_age)
        taken = sensor_readings(*arguments, rule.counts_once, state.sensors[j], y[:, j], y_quality[:, j])
        sensors.append(TagState(*taken))
    last = int(times[-1]) if count else state.last_cycle
    readings = CycleReadings(times, u, u_quality, y, y_quality)
    return readings, AssemblyState(last, tuple(inputs), tuple(sensors))


def _blank(cycles: int, tags: int) -> tuple[NDArray[np.float64], NDArray[np.int8]]:
    return np.empty((cycles, tags), dtype=np.float64), np.empty((cycles, tags), dtype=np.int8)


def _times_of(rules: UnitRules, history: History) -> NDArray[np.int64]:
    first = first_cycle_time(history.first_time, rules.sample_time)
    return cycle_times(first, history.last_time, rules.sample_time)


def between(series: TagSeries, after: int, upto: int) -> TagSeries:
    """The readings with after < time <= upto."""
    begin, end = np.searchsorted(series.times, [after, upto], side="right")
    return TagSeries(series.times[begin:end], series.values[begin:end], series.qualities[begin:end])


def _take_until(waiting: dict[int, tuple[float, int]], upto: int) -> TagSeries:
    """Remove the readings up to ``upto`` from ``waiting`` and give them in the order of their times."""
    times = sorted(time for time in waiting if time <= upto)
    taken = [waiting.pop(time) for time in times]
    return TagSeries(
        np.array(times, dtype=np.int64),
        np.array([value for value, _ in taken], dtype=np.float64),
        np.array([quality for _, quality in taken], dtype=np.int8),
    )
