"""Status codes. Numbers: OPC UA Part 6's table of codes and Part 4, 7.39 for the bits (READ, references 5.3)."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from connectors.opcua.quality import Limit, limit_of, overflowed, quality_of, status_text, with_limit
from connectors.readings import Quality


@pytest.mark.parametrize(
    ("status", "quality", "limit", "text"),
    [
        (0x00000000, Quality.GOOD, Limit.NONE, "Good"),
        (0x00960000, Quality.GOOD, Limit.NONE, "GoodLocalOverride"),
        (0x00000400, Quality.GOOD, Limit.NONE, "Good"),
        (0x00000500, Quality.GOOD, Limit.LOW, "Good, limit low"),
        (0x00000600, Quality.GOOD, Limit.HIGH, "Good, limit high"),
        (0x00000700, Quality.GOOD, Limit.CONSTANT, "Good, constant"),
        (0x408F0000, Quality.UNCERTAIN, Limit.NONE, "UncertainNoCommunicationLastUsableValue"),
        (0x40930600, Quality.UNCERTAIN, Limit.HIGH, "UncertainSensorNotAccurate, limit high"),
        (0x808C0000, Quality.BAD, Limit.NONE, "BadSensorFailure"),
        (0x808C0600, Quality.BAD, Limit.HIGH, "BadSensorFailure, limit high"),
        (0x808B0500, Quality.BAD, Limit.LOW, "BadDeviceFailure, limit low"),
        (0x00000480, Quality.GOOD, Limit.NONE, "Good, queue overflowed"),
        (0xC0000000, Quality.BAD, Limit.NONE, "Bad 0xC0000000"),
        (0x7FFF0000, Quality.UNCERTAIN, Limit.NONE, "Uncertain 0x7FFF0000"),
    ],
)
def test_a_status_code_in_words(status: int, quality: Quality, limit: Limit, text: str) -> None:
    assert quality_of(status) is quality
    assert limit_of(status) is limit
    assert status_text(status) == text


def test_limit_and_overflow_bits_count_only_where_the_code_belongs_to_a_value() -> None:
    assert limit_of(0x00000200) is Limit.NONE
    assert not overflowed(0x00000080)
    assert overflowed(0x00000480)


@given(code=st.integers(0, 0xFFFF), flags=st.integers(0, 0xFFFF))
def test_flags_change_neither_severity_nor_name(code: int, flags: int) -> None:
    assert quality_of(code << 16 | flags) is quality_of(code << 16)
    assert status_text(code << 16 | flags).startswith(status_text(code << 16))


@given(status=st.integers(0, 0xFFFFFFFF), limit=st.sampled_from(Limit))
def test_a_limit_that_is_set_is_read_back(status: int, limit: Limit) -> None:
    assert limit_of(with_limit(status, limit)) is limit
    assert quality_of(with_limit(status, limit)) is quality_of(status)
