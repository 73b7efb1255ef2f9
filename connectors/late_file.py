"""Readings that came late, beside a history: CSV, Parquet or a data frame with one row per reading.

Columns ``time`` (the reading's own), ``arrived_at``, ``tag``, ``value`` and, if wanted, ``quality``.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from connectors.csv_table import csv_table
from connectors.errors import HistoryFileError
from connectors.history import LateRows
from connectors.quality_column import NONE, quality_column
from connectors.readings import Quality
from connectors.table import (
    Origin,
    Table,
    frame_table,
    is_parquet,
    number_column,
    parquet_table,
    text_column,
)
from connectors.time_column import time_column, time_text, time_zone

TIME, ARRIVED, TAG, VALUE, QUALITY = "time", "arrived_at", "tag", "value", "quality"
NEEDED = (TIME, ARRIVED, TAG, VALUE)
_KNOWN = frozenset((*NEEDED, QUALITY))


def read_late(path: str | Path, tags: Sequence[str], timezone: str | None = None) -> LateRows:
    """Read a file of late readings.

    :param tags: those that the model needs; rows of others are left alone and named in the result.
    :raises HistoryFileError: with file, row, column and what was expected.
    """
    file, origin = Path(path), Origin(str(path), HistoryFileError)
    if is_parquet(file, origin):
        table = parquet_table(file, origin, _KNOWN.__contains__)
    else:
        table = csv_table(file, origin, _KNOWN.__contains__, VALUE.__eq__)
    return _rows(table, tags, timezone)


def late_from_frame(
    frame: pd.DataFrame, tags: Sequence[str], timezone: str | None = None, name: str = "late"
) -> LateRows:
    """Late readings from a data frame with the same columns.

    :raises HistoryFileError: as :func:`read_late`, with ``name`` in place of the file.
    """
    return _rows(frame_table(frame, Origin(name, HistoryFileError), _KNOWN.__contains__), tags, timezone)


def _rows(table: Table, tags: Sequence[str], timezone: str | None) -> LateRows:
    origin, zone = table.origin, time_zone(timezone, table.origin)
    missing = [name for name in NEEDED if name not in table.columns]
    if missing:
        raise HistoryFileError(
            *(f"{origin.name}: no column {name!r}; expected {', '.join(NEEDED)}" for name in missing)
        )
    cells = text_column(table, TAG)
    if None in cells:
        raise origin.fault("expected a tag, found an empty cell", cells.index(None), TAG)
    places = {tag: place for place, tag in enumerate(tags)}
    index = np.array([places.get(str(cell), -1) for cell in cells], dtype=np.int64)
    times, arrived = time_column(table, TIME, zone), time_column(table, ARRIVED, zone)
    values = number_column(table, VALUE, among=index >= 0)
    given = quality_column(table, QUALITY) if QUALITY in table.columns else np.full(len(index), NONE, np.int8)
    qualities = np.where(given == NONE, int(Quality.GOOD), given).astype(np.int8)
    _check(table, times, arrived, (index >= 0) & np.isnan(values) & (qualities != int(Quality.BAD)))
    order = np.argsort(arrived, kind="stable")
    order = order[index[order] >= 0]
    ignored = tuple(dict.fromkeys(str(cell) for cell in cells if cell not in places))
    parts = (times[order], arrived[order], index[order], values[order], qualities[order])
    return LateRows(origin.name, tuple(tags), *parts, ignored)


def _check(
    table: Table, times: NDArray[np.int64], arrived: NDArray[np.int64], empty: NDArray[np.bool_]
) -> None:
    early = arrived < times
    if early.any():
        row = int(early.argmax())
        message = (
            f"{time_text(int(arrived[row]))} is before the reading's own time {time_text(int(times[row]))}"
        )
        raise table.origin.fault(f"{message}; expected it after", row, ARRIVED)
    if empty.any():
        raise table.origin.fault(
            "expected a number, or the quality Bad; found none", int(empty.argmax()), VALUE
        )
