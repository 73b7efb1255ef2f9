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
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from connectors.history import History, TagSeries
from connectors.readings import Reading
from plant_models.specification import UnitSpec
from plant_models.transform import Transform
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.reading_rules import BAD, NEVER, UNMAPPED, TagState, input_values, sensor_readings
from softsensor.service.sample_grid import (
    MICROSECONDS,
    cycle_times,
    first_cycle_time,
    sample_time_in_microseconds,
)

NO_LIMIT = 2**62
"""A maximum age that nothing reaches, in microseconds."""


@dataclass(frozen=True, slots=True)
class TagRule:
    """How one tag's readings are taken: maximum age in microseconds, whether a reading counts once, and its transform, for
    which a value outside its domain is no reading.
    """

    tag: str
    max_age: int
    counts_once: bool
    transform: Transform | None = None


@dataclass(frozen=True, slots=True)
class AssemblyState:
    """What is carried on: the last cycle's time (NEVER before the first), a state per input and sensor."""

    last_cycle: int
    inputs: tuple[TagState, ...]
    sensors: tuple[TagState, ...]


@dataclass(frozen=True, slots=True)
class UnitRules:
    """The rules of a unit's tags, in the order of its model file; ``sample_time`` in microseconds."""

    sample_time: int
    inputs: tuple[TagRule, ...]
    sensors: tuple[TagRule, ...]

    @property
    def tags(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys(rule.tag for rule in self.inputs + self.sensors))

    def start(self) -> AssemblyState:
        """The state before any reading."""
        new = TagState()
        return AssemblyState(NEVER, (new,) * len(self.inputs), (new,) * len(self.sensors))


def rules_of(spec: UnitSpec) -> UnitRules:
    """The reading rules of a unit.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    sample_time = sample_time_in_microseconds(spec.sample_time)
    return UnitRules(
        sample_time,
        tuple(
            TagRule(item.tag, _age(item.max_age, 3 * sample_time), True, item.transform)
            for item in spec.inputs
        ),
        tuple(
            TagRule(
                item.tag,
                _age(item.max_age, NO_LIMIT if item.on_change else 3 * sample_time),
                not item.on_change,
                item.transform,
            )
            for item in spec.sensors
        ),
    )


def assemble_history(spec: UnitSpec, history: History) -> CycleReadings:
    """What every cycle of a history sees, from the first at or after its first row to its last row.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    rules = rules_of(spec)
    return _assemble(rules, _times_of(rules, history), rules.start(), history.series)[0]


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
        events = {tag: _between(history.series[tag], state.last_cycle, int(part[-1])) for tag in rules.tags}
        readings, state = _assemble(rules, part, state, events)
        yield readings


def history_cycles(spec: UnitSpec, history: History) -> NDArray[np.int64]:
    """The times of the cycles within a history, UTC microseconds.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    return _times_of(rules_of(spec), history)


class LiveAssembly:
    """Collects readings in any order of arrival and gives each cycle what it sees.

    Readings that arrive before their cycle is asked for give the same bits as :func:`assemble_history`. One
    that arrives after it counts in the next cycle, if it is newer than what the cycles have taken and not too
    old by then. Two readings of one tag with the same source time are one: the later arrival replaces the
    earlier while it waits.

    :param state: an earlier run's :attr:`state`, to go on from after a restart.
    """

    def __init__(self, spec: UnitSpec, state: AssemblyState | None = None) -> None:
        self._rules = rules_of(spec)
        self._state = self._rules.start() if state is None else state
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
        times = np.array([cycle_time], dtype=np.int64)
        readings, self._state = _assemble(self._rules, times, self._state, events)
        return readings


def _assemble(
    rules: UnitRules, times: NDArray[np.int64], state: AssemblyState, events: Mapping[str, TagSeries]
) -> tuple[CycleReadings, AssemblyState]:
    """Run every tag's rule over the cycles ``times`` (N,); ``events`` are those ``state`` has not seen."""
    count = len(times)
    u, u_quality = _blank(count, len(rules.inputs))
    y, y_quality = _blank(count, len(rules.sensors))
    inputs, sensors = [], []
    for j, rule in enumerate(rules.inputs):
        new = events[rule.tag]
        arguments = (new.times, new.values, _mapped(rule, new), times, rule.max_age)
        inputs.append(TagState(*input_values(*arguments, state.inputs[j], u[:, j], u_quality[:, j])))
    for j, rule in enumerate(rules.sensors):
        new = events[rule.tag]
        arguments = (new.times, new.values, _mapped(rule, new), times, rule.max_age)
        taken = sensor_readings(*arguments, rule.counts_once, state.sensors[j], y[:, j], y_quality[:, j])
        sensors.append(TagState(*taken))
    last = int(times[-1]) if count else state.last_cycle
    readings = CycleReadings(times, u, u_quality, y, y_quality)
    return readings, AssemblyState(last, tuple(inputs), tuple(sensors))


def _mapped(rule: TagRule, new: TagSeries) -> NDArray[np.int8]:
    """The readings' qualities; UNMAPPED where the tag's transform has no value for a reading that is finite and not Bad."""
    if rule.transform is None:
        return new.qualities
    unmapped = np.isfinite(new.values) & (new.qualities < BAD) & ~rule.transform.holds(new.values)
    return np.where(unmapped, np.int8(UNMAPPED), new.qualities).astype(np.int8)


def _blank(cycles: int, tags: int) -> tuple[NDArray[np.float64], NDArray[np.int8]]:
    return np.empty((cycles, tags), dtype=np.float64), np.empty((cycles, tags), dtype=np.int8)


def _age(seconds: float | None, default: int) -> int:
    """A maximum age in microseconds; an age beyond all times is no limit."""
    if seconds is None:
        return default
    return NO_LIMIT if seconds * MICROSECONDS >= NO_LIMIT else round(seconds * MICROSECONDS)


def _times_of(rules: UnitRules, history: History) -> NDArray[np.int64]:
    first = first_cycle_time(history.first_time, rules.sample_time)
    return cycle_times(first, history.last_time, rules.sample_time)


def _between(series: TagSeries, after: int, upto: int) -> TagSeries:
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
