"""What every connector speaks: one value of one tag, with its time and its quality."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum


class Quality(IntEnum):
    """Severity of an OPC UA status code (Part 4, bits 30-31)."""

    GOOD = 0
    UNCERTAIN = 1
    BAD = 2


@dataclass(frozen=True, slots=True)
class Reading:
    """One value of one tag.

    :param value: in the tag's engineering unit; nan where the quality is Bad and no value came.
    :param time: source timestamp, UTC microseconds since 1970.
    :param status: the full OPC UA status code, limit bits included; 0 where the source has none.
    """

    tag: str
    value: float
    time: int
    quality: Quality = Quality.GOOD
    status: int = 0
