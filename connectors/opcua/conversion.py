"""From OPC UA data values to readings, and from UTC microseconds to OPC UA's times and back."""

from __future__ import annotations

import math
from collections import Counter
from datetime import UTC, datetime, timedelta

from asyncua import ua

from connectors.opcua.quality import BAD_OUT_OF_RANGE, BAD_TYPE_MISMATCH, quality_of
from connectors.readings import Quality, Reading

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_MICROSECOND = timedelta(microseconds=1)
_YEAR_OF_NO_TIME = 1601
"""OPC UA writes "no time" as the first moment of 1601 (Part 6, 5.2.2.5)."""


def to_datetime(time: int) -> datetime:
    """UTC microseconds since 1970 as an aware datetime, exactly.

    >>> to_datetime(1_000_000).isoformat()
    '1970-01-01T00:00:01+00:00'
    """
    return _EPOCH + timedelta(microseconds=time)


def to_microseconds(moment: datetime) -> int:
    """An OPC UA time, UTC whether it says so or not, as microseconds since 1970, exactly."""
    aware = moment if moment.tzinfo is not None else moment.replace(tzinfo=UTC)
    return (aware - _EPOCH) // _MICROSECOND


def _time_of(data: ua.DataValue) -> int | None:
    for moment in (data.SourceTimestamp, data.ServerTimestamp):
        if moment is not None and moment.year > _YEAR_OF_NO_TIME:
            return to_microseconds(moment)
    return None


class ReadingConverter:
    """Makes readings of data values, and counts what it could not use, by reason.

    The source timestamp counts; where it is missing, the server's; what has neither gives no reading. A value
    that is no finite number becomes a Bad reading. A value that is its tag's last one again, with the same
    time and status, is no news and gives none: a server repeats values after a reconnect.
    """

    def __init__(self) -> None:
        self.refused: Counter[str] = Counter()
        self._last: dict[str, tuple[int, int, float]] = {}

    def convert(self, tag: str, data: ua.DataValue) -> Reading | None:
        """One reading of ``tag``, or None where there is no news or no time at all."""
        status = 0 if data.StatusCode is None else int(data.StatusCode.value)
        time = _time_of(data)
        if time is None:
            if quality_of(status) is not Quality.BAD:
                self.refused["no timestamp"] += 1
            return None
        value, status = self._number(data.Value, status)
        last = self._last.get(tag)
        if last is not None and last[:2] == (time, status) and _same(last[2], value):
            return None
        self._last[tag] = (time, status, value)
        return Reading(tag, value, time, quality_of(status), status)

    def _number(self, variant: ua.Variant | None, status: int) -> tuple[float, int]:
        content = None if variant is None else variant.Value
        if isinstance(content, bool | int | float):
            value = float(content)
            if math.isfinite(value):
                return value, status
            reason, own_status = "not finite", BAD_OUT_OF_RANGE
        else:
            reason, own_status = ("no value" if content is None else "not a number"), BAD_TYPE_MISMATCH
        if quality_of(status) is Quality.BAD:
            return math.nan, status
        self.refused[reason] += 1
        return math.nan, own_status


def _same(first: float, second: float) -> bool:
    return first == second or (math.isnan(first) and math.isnan(second))
