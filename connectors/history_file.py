"""Recorded histories: CSV and Parquet files and data frames with a time column and a column per tag."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import pandas as pd

from connectors.csv_table import csv_table
from connectors.errors import HistoryFileError
from connectors.history import History, Qualities, TagSeries, Times
from connectors.quality_column import NONE, quality_column
from connectors.readings import Quality
from connectors.table import Origin, Table, frame_table, is_parquet, number_column, parquet_table
from connectors.time_column import time_column, time_text, time_zone

TIME = "time"


def read_history(path: str | Path, tags: Sequence[str], timezone: str | None = None) -> History:
    """Read a history file, CSV or Parquet.

    :param tags: those that the model needs; other columns are ignored and named in the result.
    :param timezone: an IANA name for times without an offset; None refuses such times.
    :raises HistoryFileError: with file, row, column and what was expected.
    """
    file = Path(path)
    origin = Origin(str(path), HistoryFileError)
    wanted = wanted_columns(tags)
    if is_parquet(file, origin):
        table = parquet_table(file, origin, wanted)
    else:
        table = csv_table(file, origin, wanted, set(tags).__contains__)
    return history_of(table, tags, timezone)


def history_from_frame(
    frame: pd.DataFrame, tags: Sequence[str], timezone: str | None = None, name: str = "history"
) -> History:
    """A history from a data frame with the same columns as the files; rows are told from 1 in messages.

    :raises HistoryFileError: as :func:`read_history`, with ``name`` in place of the file.
    """
    return history_of(
        frame_table(frame, Origin(name, HistoryFileError), wanted_columns(tags)), tags, timezone
    )


def wanted_columns(tags: Sequence[str]) -> Callable[[str], bool]:
    """Which columns of a history belong to these tags."""
    return {TIME, *tags, *(_quality(tag) for tag in tags)}.__contains__


def _quality(tag: str) -> str:
    return f"{tag}.quality"


def history_of(table: Table, tags: Sequence[str], timezone: str | None) -> History:
    """A history from a table with a time column and a column per tag.

    :raises HistoryFileError: with row, column and what was expected.
    """
    origin = table.origin
    zone = time_zone(timezone, origin)
    if TIME not in table.columns:
        raise origin.fault(f"expected a column named {TIME!r}, found {_listed(table.names)}")
    missing = [tag for tag in tags if tag not in table.columns]
    if missing:
        raise HistoryFileError(
            *(f"{origin.name}: no column {tag!r}, a tag that is needed" for tag in missing)
        )
    if table.rows == 0:
        raise origin.fault("has no rows; expected at least one")
    times = time_column(table, TIME, zone)
    _check_order(table, times)
    series = {tag: _series(table, tag, times) for tag in tags}
    ignored = tuple(name for name in table.names if name not in table.columns)
    return History(origin.name, series, int(times[0]), int(times[-1]), ignored)


def _check_order(table: Table, times: Times) -> None:
    not_later = np.flatnonzero(np.diff(times) <= 0)
    if not_later.size == 0:
        return
    row = int(not_later[0]) + 1
    before = table.origin.row(row - 1)
    if times[row] == times[row - 1]:
        message = f"{time_text(int(times[row]))} is the time of {before} too"
    else:
        message = f"{time_text(int(times[row]))} is before {time_text(int(times[row - 1]))} in {before}"
    raise table.origin.fault(f"{message}; expected each time once, in increasing order", row, TIME)


def _series(table: Table, tag: str, times: Times) -> TagSeries:
    """Only what is a reading: a cell with a number, or an empty one with quality Bad."""
    values = number_column(table, tag)
    empty = np.isnan(values)
    if _quality(tag) in table.columns:
        given = quality_column(table, _quality(tag))
        qualities: Qualities = np.where(given == NONE, int(Quality.GOOD), given).astype(np.int8)
        empty &= given != int(Quality.BAD)
    else:
        qualities = np.zeros(len(values), dtype=np.int8)
    if not empty.any():
        return TagSeries(times, values, qualities)
    kept = ~empty
    return TagSeries(times[kept], values[kept], qualities[kept])


def _listed(names: Sequence[str], most: int = 8) -> str:
    shown = ", ".join(names[:most])
    return f"{shown} and {len(names) - most} more" if len(names) > most else shown or "no columns"
