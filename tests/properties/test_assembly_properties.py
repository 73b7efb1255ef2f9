"""Assembly against a slow restatement of the reading rules, and live against recorded, bit for bit."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from connectors.history import History, TagSeries
from connectors.readings import Quality, Reading
from plant_models.specification import InputSpec, SensorSpec, UnitSpec
from softsensor.readings_of_cycle import CycleQuality, CycleReadings
from softsensor.service.assembly import LiveAssembly, assemble_blocks, assemble_history

SAMPLE_TIMES = [10.0, 7.0]
"""Seconds; the first divides a day, the second does not."""
MICROSECOND = 1_000_000


@dataclass(frozen=True)
class Case:
    spec: UnitSpec
    history: History


@dataclass(frozen=True)
class Seen:
    """What one cycle is expected to see of one tag."""

    value: float
    quality: CycleQuality


def usable(reading: Reading) -> bool:
    return math.isfinite(reading.value) and reading.quality != Quality.BAD


def expected_sensor(
    readings: list[Reading], cycles: list[int], k: int, max_age: float, on_change: bool
) -> Seen:
    """Contract section 3, said without state: what counts at cycle k depends on cycles k and k - 1 only."""
    nothing = float("nan")
    so_far = [reading for reading in readings if reading.time <= cycles[k]]
    if not so_far:
        return Seen(nothing, CycleQuality.MISSING)
    newest = max(so_far, key=lambda reading: reading.time)
    if cycles[k] - newest.time > max_age * MICROSECOND:
        return Seen(nothing, CycleQuality.STALE)
    if not on_change and k > 0 and newest.time <= cycles[k - 1]:
        return Seen(nothing, CycleQuality.MISSING)
    if not usable(newest):
        return Seen(nothing, CycleQuality.BAD)
    return Seen(newest.value, CycleQuality(int(newest.quality)))


def expected_input(readings: list[Reading], cycle: int, max_age: float) -> Seen:
    so_far = sorted((reading for reading in readings if reading.time <= cycle), key=lambda item: item.time)
    good_enough = [reading for reading in so_far if usable(reading)]
    if not good_enough:
        return Seen(float("nan"), CycleQuality.MISSING)
    held = good_enough[-1]
    if cycle - held.time > max_age * MICROSECOND:
        return Seen(held.value, CycleQuality.STALE)
    if not usable(so_far[-1]):
        return Seen(held.value, CycleQuality.BAD)
    return Seen(held.value, CycleQuality(int(held.quality)))


def readings_of(case: Case, tag: str) -> list[Reading]:
    series = case.history.series[tag]
    rows = zip(series.times.tolist(), series.values.tolist(), series.qualities.tolist(), strict=True)
    return [Reading(tag, value, time, Quality(quality)) for time, value, quality in rows]


values = st.one_of(
    st.floats(allow_nan=False, allow_infinity=False), st.sampled_from([float("nan"), float("inf"), -0.0])
)
qualities = st.sampled_from([0, 0, 0, 1, 2])
ages = st.one_of(st.none(), st.sampled_from([0.0, 5.0, 12.5, 40.0, 1e300]))


@st.composite
def series(draw: st.DrawFn, start: int) -> TagSeries:
    """Readings on, beside and far from the grid, over about twenty cycles."""
    steps = st.one_of(
        st.integers(0, 200 * MICROSECOND), st.integers(0, 20).map(lambda n: n * 10 * MICROSECOND)
    )
    times = sorted(set(draw(st.lists(steps, max_size=25))))
    count = len(times)
    return TagSeries(
        np.array([start + time for time in times], dtype=np.int64),
        np.array(draw(st.lists(values, min_size=count, max_size=count)), dtype=np.float64),
        np.array(draw(st.lists(qualities, min_size=count, max_size=count)), dtype=np.int8),
    )


@st.composite
def cases(draw: st.DrawFn) -> Case:
    start = draw(st.sampled_from([0, -35 * MICROSECOND - 1, 1_767_225_600_123_456]))
    inputs = tuple(InputSpec(tag, "m3/h", 1.0, (0.0, 2.0), max_age=draw(ages)) for tag in ("FI1", "FI2"))
    sensors = tuple(
        SensorSpec(tag, "degC", 1.0, (0.0, 2.0), 0.1, 0.4, on_change=draw(st.booleans()), max_age=draw(ages))
        for tag in ("TI1", "TI2", "TI3")
    )
    spec = UnitSpec("R-1", "", draw(st.sampled_from(SAMPLE_TIMES)), inputs, sensors, (), (), (), 1e6)
    tags = [item.tag for item in inputs] + [item.tag for item in sensors]
    readings = {tag: draw(series(start)) for tag in tags}
    return Case(spec, History("drawn", readings, start, start + 200 * MICROSECOND))


def bits(readings: CycleReadings) -> tuple[bytes, ...]:
    arrays = (readings.times, readings.u, readings.u_quality, readings.y, readings.y_quality)
    return tuple(array.tobytes() for array in arrays)


def same(value: float, expected: float) -> bool:
    return np.float64(value).tobytes() == np.float64(expected).tobytes() or (
        value != value and expected != expected
    )


@settings(deadline=None)
@given(cases())
def test_each_cycle_sees_what_the_rules_say(case: Case) -> None:
    seen = assemble_history(case.spec, case.history)
    cycles = seen.times.tolist()
    for j, item in enumerate(case.spec.inputs):
        max_age = 3 * case.spec.sample_time if item.max_age is None else item.max_age
        readings = readings_of(case, item.tag)
        for k, cycle in enumerate(cycles):
            expected = expected_input(readings, cycle, max_age)
            assert seen.u_quality[k, j] == expected.quality
            assert same(seen.u[k, j], expected.value)
    for j, sensor in enumerate(case.spec.sensors):
        default = math.inf if sensor.on_change else 3 * case.spec.sample_time
        max_age = default if sensor.max_age is None else sensor.max_age
        readings = readings_of(case, sensor.tag)
        for k in range(len(cycles)):
            expected = expected_sensor(readings, cycles, k, max_age, sensor.on_change)
            assert seen.y_quality[k, j] == expected.quality
            assert same(seen.y[k, j], expected.value)


@settings(deadline=None)
@given(cases(), st.data())
def test_live_sees_the_same_bits_in_any_order_of_arrival(case: Case, data: st.DataObject) -> None:
    """Every reading arrives at some moment before the first cycle that could count it, in any order."""
    recorded = assemble_history(case.spec, case.history)
    cycles = recorded.times.tolist()
    arrivals: list[list[Reading]] = [[] for _ in cycles]
    for reading in data.draw(
        st.permutations([r for tag in case.history.tags for r in readings_of(case, tag)])
    ):
        latest = int(np.searchsorted(recorded.times, reading.time, side="left"))
        if latest < len(cycles):
            arrivals[data.draw(st.integers(max(0, latest - 3), latest))].append(reading)
    restart = data.draw(st.integers(0, len(cycles)))
    live = LiveAssembly(case.spec)
    rows = []
    for k, cycle in enumerate(cycles):
        if k == restart and live.waiting == 0:
            live = LiveAssembly(case.spec, live.state)
        for reading in arrivals[k]:
            live.accept(reading)
        rows.append(live.readings_at(cycle))
    assert bits(_joined(rows)) == bits(recorded)


@settings(deadline=None)
@given(cases(), st.integers(1, 30))
def test_blocks_are_the_whole_in_parts(case: Case, block: int) -> None:
    parts = list(assemble_blocks(case.spec, case.history, block))
    assert all(len(part) == block for part in parts[:-1])
    assert bits(_joined(parts)) == bits(assemble_history(case.spec, case.history))


def _joined(parts: list[CycleReadings]) -> CycleReadings:
    return CycleReadings(
        np.concatenate([part.times for part in parts]),
        np.concatenate([part.u for part in parts]),
        np.concatenate([part.u_quality for part in parts]),
        np.concatenate([part.y for part in parts]),
        np.concatenate([part.y_quality for part in parts]),
    )
