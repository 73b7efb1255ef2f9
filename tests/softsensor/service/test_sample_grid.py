"""The grid on which cycles run."""

from __future__ import annotations

from datetime import UTC, datetime

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from softsensor.errors import ReplayError
from softsensor.service.sample_grid import cycle_times, first_cycle_time, sample_time_in_microseconds

SECOND = 1_000_000


def at(text: str) -> int:
    return int(datetime.fromisoformat(text).astimezone(UTC).timestamp()) * SECOND


@pytest.mark.parametrize(
    ("seconds", "microseconds"),
    [(10.0, 10_000_000), (0.1, 100_000), (1e-6, 1), (4.2 * 60.0, 252_000_000), (86_400.0, 86_400_000_000)],
)
def test_sample_times_are_whole_microseconds(seconds: float, microseconds: int) -> None:
    assert sample_time_in_microseconds(seconds) == microseconds


@pytest.mark.parametrize(
    "seconds", [1.0 / 3.0, 1e-7, 0.0, -1.0, float("nan"), float("inf"), 10_000.000_000_5, 0.000_001_5]
)
def test_other_sample_times_are_refused(seconds: float) -> None:
    with pytest.raises(ReplayError, match="not a whole number of microseconds"):
        sample_time_in_microseconds(seconds)


@pytest.mark.parametrize(
    ("start", "sample_time", "first"),
    [
        # 10 s divides a day: the next multiple since 1970, or the row itself where it lies on one
        ("2026-01-01T00:00:03+00:00", 10, "2026-01-01T00:00:10+00:00"),
        ("2026-01-01T00:00:10+00:00", 10, "2026-01-01T00:00:10+00:00"),
        # 7 s does not divide a day: the grid starts at the row
        ("2026-01-01T00:00:03+00:00", 7, "2026-01-01T00:00:03+00:00"),
        # two days are no divisor of one
        ("2026-01-01T00:00:03+00:00", 172_800, "2026-01-01T00:00:03+00:00"),
        # before 1970 the same grid goes on backwards
        ("1969-12-31T23:59:51+00:00", 10, "1970-01-01T00:00:00+00:00"),
        ("1969-12-31T23:59:49+00:00", 10, "1969-12-31T23:59:50+00:00"),
    ],
)
def test_first_cycle(start: str, sample_time: int, first: str) -> None:
    assert first_cycle_time(at(start), sample_time * SECOND) == at(first)


def test_cycles_end_at_the_last_row() -> None:
    assert cycle_times(0, 29, 10).tolist() == [0, 10, 20]
    assert cycle_times(0, 30, 10).tolist() == [0, 10, 20, 30]
    assert cycle_times(0, 0, 10).tolist() == [0]
    assert cycle_times(10, 9, 10).tolist() == []
    assert cycle_times(0, 30, 10).dtype == np.int64


@given(st.integers(-(2**52), 2**52), st.integers(1, 10**11), st.integers(0, 10**13))
def test_first_cycle_is_the_first_not_before_the_start(start: int, sample_time: int, later: int) -> None:
    first = first_cycle_time(start, sample_time)
    assert start <= first < start + sample_time
    divides_a_day = 86_400_000_000 % sample_time == 0
    assert (first % sample_time == 0) if divides_a_day else (first == start)
    if divides_a_day:
        # whoever starts later on the same grid meets the same cycles
        assert (first_cycle_time(start + later, sample_time) - first) % sample_time == 0
