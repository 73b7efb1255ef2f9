"""Times with units, read and written."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from plant_models.durations import format_duration, parse_duration, parse_signed_duration, parse_time_unit
from plant_models.errors import UnitError


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("10 s", 10.0),
        ("10s", 10.0),
        (" 10  s ", 10.0),
        ("4.2 min", 252.0),
        ("2 h", 7200.0),
        ("1.5 h", 5400.0),
        ("30 d", 2_592_000.0),
        ("1 week", 604_800.0),
        ("250 ms", 0.25),
        ("1e3 s", 1000.0),
        (".5 min", 30.0),
        ("0 s", 0.0),
        ("0.1 min", 6.0),
        ("2 hours", 7200.0),
    ],
)
def test_a_time_with_its_unit_is_seconds(text: str, seconds: float) -> None:
    assert parse_duration(text) == seconds


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("10", "has no unit"),
        (10, "in quotation marks"),
        (10.0, "in quotation marks"),
        (True, "got true"),
        (None, "in quotation marks"),
        ("", "got ''"),
        ("ten s", "got 'ten s'"),
        ("10 m", "none of ms, s, min, h, d, week"),
        ("10 months", "none of"),
        ("-5 s", "not below zero"),
        ("nan s", "got 'nan s'"),
        ("inf s", "got 'inf s'"),
        ("1e400 s", "too large"),
        ("1e308 week", "too large"),
        ("1,5 h", "got '1,5 h'"),
        ("1 h 30 min", "got '1 h 30 min'"),
        ("١ s", "got"),
    ],
)
def test_what_is_no_time_is_refused_with_the_expectation(text: object, said: str) -> None:
    with pytest.raises(UnitError) as refusal:
        parse_duration(text)
    assert 'expected a time with its unit, such as "10 s"' in str(refusal.value)
    assert said in str(refusal.value)


def test_only_a_signed_duration_may_be_negative() -> None:
    assert parse_signed_duration("-0.5 min") == -30.0


@pytest.mark.parametrize(
    ("text", "seconds"), [("16.1 min", 966.0), ("4.1 min", 246.0), ("0.07 h", 252.0), ("2.3 d", 198720.0)]
)
def test_products_are_rounded_once(text: str, seconds: float) -> None:
    """In floating point 16.1 * 60 is 966.0000000000001: a dead time of whole samples would get a fraction."""
    number, unit = text.split()
    assert float(number) * parse_time_unit(unit) != seconds
    assert parse_duration(text) == seconds


def test_absurd_exponents_neither_hang_nor_overflow() -> None:
    assert parse_duration("1e-999999999999999999999 d") == 0.0


def test_a_unit_of_time_alone() -> None:
    assert [parse_time_unit(unit) for unit in ("ms", "s", "min", "h", "d")] == [
        0.001,
        1.0,
        60.0,
        3600.0,
        86400.0,
    ]
    for wrong in ("m", "1 min", 60, ""):
        with pytest.raises(UnitError, match="expected a unit of time"):
            parse_time_unit(wrong)


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0.0, "0 s"),
        (10.0, "10 s"),
        (252.0, "4.2 min"),
        (90.0, "90 s"),
        (5400.0, "90 min"),
        (7200.0, "2 h"),
        (86400.0, "1 d"),
        (2_592_000.0, "30 d"),
        (0.25, "250 ms"),
        (0.001, "1 ms"),
    ],
)
def test_written_in_the_unit_that_reads_shortest(seconds: float, text: str) -> None:
    assert format_duration(seconds) == text


@given(st.floats(min_value=0.0, max_value=1e300, allow_nan=False))
def test_what_is_written_reads_back_to_the_same_float(seconds: float) -> None:
    assert parse_duration(format_duration(seconds)) == seconds


@pytest.mark.parametrize("seconds", [-1.0, math.nan, math.inf])
def test_what_is_no_duration_is_not_written(seconds: float) -> None:
    with pytest.raises(UnitError):
        format_duration(seconds)


@given(st.text())
def test_any_text_is_read_or_refused(text: str) -> None:
    try:
        seconds = parse_duration(text)
    except UnitError:
        return
    assert math.isfinite(seconds)
    assert seconds >= 0.0
