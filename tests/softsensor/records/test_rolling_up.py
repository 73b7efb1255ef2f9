"""Rollups against a plain second computation, and made again without counting twice."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from softsensor.errors import RecordsError
from softsensor.records import series, storing
from softsensor.records.engine import Database
from softsensor.records.rolling_up import UnitTags, roll_up, rollups_of

NOW = 1_796_083_200_000_000
STEP = 10_000_000
MINUTE = 60_000_000
TAGS = UnitTags(("FI2103", "FI2104"), ("TI2101A", "TI2101B", "TI2105"), ("AY2101",))


@given(
    st.lists(st.tuples(st.integers(-500, 500), st.floats(-1e6, 1e6) | st.just(math.nan))),
    st.integers(1, 60),
)
def test_rollups_agree_with_a_plain_computation(pairs: list[tuple[int, float]], width: int) -> None:
    pairs.sort(key=lambda pair: pair[0])
    times = np.array([time for time, _ in pairs], dtype=np.int64)
    values = np.array([value for _, value in pairs], dtype=np.float64)
    found = rollups_of(("T", "reading"), width, times, values)
    kept = [(math.floor(time / width) * width, value) for time, value in pairs if not math.isnan(value)]
    starts = sorted({start for start, _ in kept})
    assert [rollup.start_us for rollup in found] == starts
    for rollup in found:
        inside = [value for start, value in kept if start == rollup.start_us]
        assert (rollup.minimum, rollup.maximum, rollup.count) == (min(inside), max(inside), len(inside))
        assert rollup.mean == pytest.approx(math.fsum(inside) / len(inside), rel=1e-12, abs=1e-6)


def test_the_cycles_of_a_span_are_rolled_up_once(database: Database, plant: Any) -> None:
    with database.write() as connection:
        storing.store_readings(connection, plant.unit, plant.readings(0, 20))
        storing.store_results(connection, plant.unit, plant.results(0, 18))
    for _ in range(2):
        with database.write() as connection:
            roll_up(connection, plant.unit, {plant.revision: TAGS}, MINUTE, (NOW, NOW + 4 * MINUTE))
    rows = series.rollups_between(database, plant.unit, MINUTE, NOW, NOW + 4 * MINUTE)
    by_name = {(row.tag, row.quantity, (row.start_us - NOW) // MINUTE): row for row in rows}
    assert len(by_name) == len(rows) == 5 * 4 + 2 * 3
    third = by_name["TI2101A", "reading", 3]
    assert (third.minimum, third.maximum, third.count) == (math.sin(18), math.sin(19), 2)
    odd_missing = by_name["TI2101B", "reading", 0]
    assert (odd_missing.count, odd_missing.mean) == (3, 0.0)
    value = by_name["AY2101", "value", 2]
    assert (value.minimum, value.mean, value.maximum, value.count) == (12.25, 14.75, 17.25, 6)


def test_a_span_that_cuts_a_stretch_or_an_unknown_revision_is_refused(database: Database, plant: Any) -> None:
    with database.write() as connection:
        storing.store_readings(connection, plant.unit, plant.readings(0, 2))
        with pytest.raises(RecordsError, match="cannot be made over"):
            roll_up(connection, plant.unit, {plant.revision: TAGS}, MINUTE, (NOW, NOW + STEP))
        with pytest.raises(RecordsError, match="tags of revision"):
            roll_up(connection, plant.unit, {}, MINUTE, (NOW, NOW + MINUTE))
