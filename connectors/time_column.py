"""Times in a table's column to integer UTC microseconds: ISO 8601 text, or timestamps of any resolution.

Digits finer than a microsecond are cut off. Local times need a time zone, and are refused where the clock
that was put back shows them twice, or the clock that was put forward never shows them.
"""

from __future__ import annotations

import contextlib
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from connectors.table import Column, Origin, Table

EXPECTED = "expected a time such as 2026-01-31T14:00:00Z or 2026-01-31T15:00:00+01:00"
_EPOCH = datetime(1970, 1, 1)
_ONE = timedelta(microseconds=1)
_BEYOND_MICROSECONDS = r"(:\d\d\.\d{6})\d+"


def time_zone(name: str | None, origin: Origin) -> ZoneInfo | None:
    """The named time zone, None for none; an unknown name is refused."""
    if name is None:
        return None
    try:
        return ZoneInfo(name)
    except (KeyError, ValueError, OSError):
        message = f"no time zone is called {name!r}; expected a name such as Europe/Berlin"
        raise origin.fault(message) from None


def time_column(table: Table, name: str, zone: ZoneInfo | None) -> NDArray[np.int64]:
    """A column of times as UTC microseconds (rows,).

    :param zone: of times without an offset; None refuses them.
    """
    column = table.columns[name]
    if column.null_count:
        row = int(np.asarray(column.is_null()).argmax())
        raise table.origin.fault(f"{EXPECTED}, found an empty cell", row, name)
    if pa.types.is_timestamp(column.type):
        if column.type.tz is not None:
            return _microseconds(table, name, column)
        return _local(table, name, _microseconds(table, name, column), zone)
    if pa.types.is_string(column.type) or pa.types.is_large_string(column.type):
        return _from_text(table, name, column, zone)
    if table.rows == 0:
        return np.empty(0, dtype=np.int64)
    raise table.origin.fault(f"{EXPECTED}, found a column of {column.type}", column=name)


def time_text(time: int) -> str:
    """UTC microseconds as ISO 8601 text, for messages.

    >>> time_text(1_500_000)
    '1970-01-01T00:00:01.500000Z'
    """
    return (_EPOCH + timedelta(microseconds=time)).isoformat() + "Z"


def _microseconds(table: Table, name: str, column: Column) -> NDArray[np.int64]:
    """A timestamp column's numbers, floored to microseconds; exact from any other resolution."""
    numbers = np.asarray(pc.cast(column, pa.int64()).to_numpy(zero_copy_only=False), dtype=np.int64)
    if column.type.unit == "ns":
        return numbers // 1000
    factor = {"us": 1, "ms": 1_000, "s": 1_000_000}[column.type.unit]
    beyond = np.abs(numbers) > 253_402_300_799_999_999 // factor
    if beyond.any():
        raise table.origin.fault(f"{EXPECTED}, found one after the year 9999", int(beyond.argmax()), name)
    return numbers * factor


def _from_text(table: Table, name: str, column: Column, zone: ZoneInfo | None) -> NDArray[np.int64]:
    """Whole columns of one form go through Arrow; anything else cell by cell, which also finds the fault."""
    times = _as_one_form(column)
    if times is not None:
        whole = _microseconds(table, name, times)
        return whole if times.type.tz else _local(table, name, whole, zone)
    numbers = np.empty(table.rows, dtype=np.int64)
    local = np.zeros(table.rows, dtype=np.bool_)
    for row, cell in enumerate(column.to_pylist()):
        time = _parsed(table, name, row, cell)
        local[row] = time.tzinfo is None
        if time.tzinfo is not None:
            time = time.astimezone(UTC).replace(tzinfo=None)
        numbers[row] = (time - _EPOCH) // _ONE
    if local.any():
        numbers[local] = _local(table, name, numbers[local], zone, np.flatnonzero(local))
    return numbers


def _as_one_form(column: Column) -> Column | None:
    """The column as timestamps, where all its cells are of one form that Arrow knows."""
    for shorten in (False, True):
        text = pc.replace_substring_regex(column, _BEYOND_MICROSECONDS, r"\1") if shorten else column
        for kind in (pa.timestamp("us", tz="UTC"), pa.timestamp("us")):
            with contextlib.suppress(pa.ArrowInvalid):
                return pc.cast(text, kind)
    return None


def _parsed(table: Table, name: str, row: int, cell: str) -> datetime:
    try:
        time = datetime.fromisoformat(cell.strip())
        return time if time.tzinfo is None else time.astimezone(UTC)
    except (ValueError, OverflowError):
        raise table.origin.fault(f"{EXPECTED}, found {cell!r}", row, name) from None


def _local(
    table: Table,
    name: str,
    numbers: NDArray[np.int64],
    zone: ZoneInfo | None,
    rows: NDArray[np.intp] | None = None,
) -> NDArray[np.int64]:
    """Wall-clock microseconds to UTC microseconds; ``rows`` are where in the table they are, default all."""
    if numbers.size == 0:
        return numbers
    wall = pd.DatetimeIndex(numbers.view("datetime64[us]"))

    def fault(position: int, reason: str) -> Exception:
        row = position if rows is None else int(rows[position])
        return table.origin.fault(f"{wall[position].isoformat()} {reason}", row, name)

    if zone is None:
        raise fault(0, "has no offset from UTC; write one, or name the time zone with --timezone")
    placed = wall.tz_localize(zone, ambiguous="NaT", nonexistent="NaT")
    unplaced = np.asarray(placed.isna())
    if unplaced.any():
        position = int(unplaced.argmax())
        shown = wall[position].to_pydatetime(warn=False)
        back = shown.replace(tzinfo=zone).astimezone(UTC).astimezone(zone).replace(tzinfo=None)
        if back == shown:
            raise fault(
                position, f"occurs twice in {zone.key}, where the clock was put back; write the offset"
            )
        raise fault(position, f"does not exist in {zone.key}, where the clock was put forward")
    utc = placed.tz_convert("UTC").tz_localize(None).to_numpy().astype("datetime64[us]")
    return np.asarray(utc.view(np.int64))
