"""Data values to readings: which time counts, what is no number, what is no news."""

from __future__ import annotations

import math
from datetime import UTC, datetime
from typing import Any

import pytest
from asyncua import ua
from hypothesis import given
from hypothesis import strategies as st

from connectors.opcua.conversion import ReadingConverter, to_datetime, to_microseconds
from connectors.readings import Quality, Reading

SOURCE = datetime(2026, 12, 1, 6, 0, 0, 123456, tzinfo=UTC)
SERVER = datetime(2026, 12, 1, 6, 0, 1, tzinfo=UTC)
SOURCE_US = 1796104800123456
"""COMPUTED: date -u -d '2026-12-01 06:00:00' +%s is 1796104800."""


def data(
    value: Any, status: int = 0, source: datetime | None = SOURCE, server: datetime | None = SERVER
) -> ua.DataValue:
    return ua.DataValue(
        ua.Variant(value), ua.StatusCode(status), SourceTimestamp=source, ServerTimestamp=server
    )


@given(time=st.integers(-(10**15), 10**17))
def test_microseconds_survive_the_way_there_and_back(time: int) -> None:
    assert to_microseconds(to_datetime(time)) == time


def test_the_source_timestamp_counts_to_the_microsecond() -> None:
    assert ReadingConverter().convert("TI", data(92.4)) == Reading("TI", 92.4, SOURCE_US)


@pytest.mark.parametrize("missing", [None, datetime(1601, 1, 1, tzinfo=UTC)])
def test_the_server_timestamp_stands_in_for_a_missing_source_timestamp(missing: datetime | None) -> None:
    reading = ReadingConverter().convert("TI", data(92.4, source=missing))
    assert reading == Reading("TI", 92.4, to_microseconds(SERVER))


def test_a_value_without_any_time_gives_no_reading_and_is_counted() -> None:
    converter = ReadingConverter()
    assert converter.convert("TI", data(92.4, source=None, server=None)) is None
    assert converter.refused == {"no timestamp": 1}


@pytest.mark.parametrize(
    ("value", "reason"),
    [
        ("12.5", "not a number"),
        ([1.0, 2.0], "not a number"),
        (None, "no value"),
        (math.nan, "not finite"),
        (math.inf, "not finite"),
    ],
)
def test_what_is_no_finite_number_is_a_bad_reading_and_is_counted(value: Any, reason: str) -> None:
    converter = ReadingConverter()
    reading = converter.convert("TI", data(value))
    assert reading is not None
    assert reading.quality is Quality.BAD
    assert math.isnan(reading.value)
    assert converter.refused == {reason: 1}


@pytest.mark.parametrize(("value", "number"), [(True, 1.0), (7, 7.0), (-2.5, -2.5)])
def test_numbers_of_every_kind_are_taken(value: Any, number: float) -> None:
    reading = ReadingConverter().convert("TI", data(value))
    assert reading is not None
    assert (reading.value, reading.quality) == (number, Quality.GOOD)


def test_a_bad_status_keeps_its_code_and_has_no_value() -> None:
    converter = ReadingConverter()
    reading = converter.convert("TI", data(None, 0x808C0600))
    assert reading is not None
    assert (reading.quality, reading.status) == (Quality.BAD, 0x808C0600)
    assert math.isnan(reading.value)
    assert converter.refused == {}


def test_the_same_again_is_no_news_but_a_new_time_is() -> None:
    converter = ReadingConverter()
    assert converter.convert("TI", data(1.0)) is not None
    assert converter.convert("TI", data(1.0)) is None
    assert converter.convert("TJ", data(1.0)) is not None
    assert converter.convert("TI", data(1.0, source=SERVER)) is not None
    assert converter.convert("TI", data(1.0, 0x40930000, source=SERVER)) is not None
    assert converter.convert("TI", data(None, 0x808C0000, source=SERVER)) is not None
    assert converter.convert("TI", data(None, 0x808C0000, source=SERVER)) is None
