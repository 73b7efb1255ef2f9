"""Laboratory results from CSV and Parquet files and data frames: one row per result.

Columns ``sampled_at``, ``reported_at``, ``tag``, ``value`` and, if wanted, ``time_uncertainty``: seconds as a
number, or a time with its unit such as ``5 min``. Of one tag and sampling time, two different values reported at the
same time are two determinations of one sample and both count; one that was reported later corrects what was reported
before. The same value twice in a row is a row that was copied, and is refused.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

from connectors.csv_table import csv_table
from connectors.errors import LabFileError
from connectors.lab_results import LabResults
from connectors.table import (
    Origin,
    Table,
    as_number,
    frame_table,
    is_parquet,
    number_column,
    parquet_table,
    text_column,
)
from connectors.time_column import time_column, time_text, time_zone
from plant_models.durations import parse_duration
from plant_models.errors import UnitError

SAMPLED, REPORTED, TAG, VALUE, UNCERTAINTY = "sampled_at", "reported_at", "tag", "value", "time_uncertainty"
NEEDED = (SAMPLED, REPORTED, TAG, VALUE)
_KNOWN = frozenset((*NEEDED, UNCERTAINTY))


def read_lab(path: str | Path, tags: Sequence[str], timezone: str | None = None) -> LabResults:
    """Read a file of laboratory results, CSV or Parquet; one without rows has no results and no fault.

    :param tags: the laboratory tags that the model names; results of others are ignored and named.
    :param timezone: an IANA name for times without an offset; None refuses such times.
    :raises LabFileError: with file, row, column and what was expected.
    """
    file = Path(path)
    origin = Origin(str(path), LabFileError)
    if is_parquet(file, origin):
        table = parquet_table(file, origin, _KNOWN.__contains__)
    else:
        table = csv_table(file, origin, _KNOWN.__contains__, VALUE.__eq__)
    return _results(table, tags, timezone)


def lab_from_frame(
    frame: pd.DataFrame, tags: Sequence[str], timezone: str | None = None, name: str = "lab"
) -> LabResults:
    """Laboratory results from a data frame with the same columns as the files.

    :raises LabFileError: as :func:`read_lab`, with ``name`` in place of the file.
    """
    return _results(frame_table(frame, Origin(name, LabFileError), _KNOWN.__contains__), tags, timezone)


def _results(table: Table, tags: Sequence[str], timezone: str | None) -> LabResults:
    origin = table.origin
    zone = time_zone(timezone, origin)
    missing = [name for name in NEEDED if name not in table.columns]
    if missing:
        raise LabFileError(
            *(f"{origin.name}: no column {name!r}; expected {', '.join(NEEDED)}" for name in missing)
        )
    cells = text_column(table, TAG)
    if None in cells:
        raise origin.fault("expected a tag, found an empty cell", cells.index(None), TAG)
    places = {tag: place for place, tag in enumerate(tags)}
    tag_index = np.array([places.get(str(cell), -1) for cell in cells], dtype=np.int64)
    wanted = tag_index >= 0
    results = LabResults(
        name=origin.name,
        tags=tuple(tags),
        sampled_at=time_column(table, SAMPLED, zone),
        reported_at=time_column(table, REPORTED, zone),
        tag_index=tag_index,
        values=number_column(table, VALUE, among=wanted),
        time_uncertainty=_uncertainty(table, wanted),
        rows=np.arange(1, table.rows + 1, dtype=np.int64),
        ignored_tags=tuple(dict.fromkeys(str(cell) for cell in cells if cell not in places)),
        ignored_columns=tuple(name for name in table.names if name not in table.columns),
    ).only(wanted)
    _check(results, origin)
    results = results.only(np.argsort(results.reported_at, kind="stable"))
    _refuse_copies(results, origin)
    return results


def _check(results: LabResults, origin: Origin) -> None:
    """Refuse a value that is not there, and a report before its sample."""
    for result in range(len(results)):
        row = int(results.rows[result]) - 1
        sampled, reported = int(results.sampled_at[result]), int(results.reported_at[result])
        value = float(results.values[result])
        if math.isnan(value):
            raise origin.fault("expected a number, found none", row, VALUE)
        if reported < sampled:
            message = (
                f"{time_text(reported)} is before the sampling at {time_text(sampled)}; expected it after"
            )
            raise origin.fault(message, row, REPORTED)


def _refuse_copies(results: LabResults, origin: Origin) -> None:
    """Refuse the same result twice; ``results`` in the order of their reports."""
    newest: dict[tuple[int, int], tuple[int, dict[float, int]]] = {}
    for result in range(len(results)):
        row, value = int(results.rows[result]) - 1, float(results.values[result])
        sampled, reported = int(results.sampled_at[result]), int(results.reported_at[result])
        sample = (int(results.tag_index[result]), sampled)
        before, values = newest.get(sample, (reported, {}))
        if value in values:
            first, second = sorted((row, values[value]))
            message = (
                f"the same result of {results.tag(result)} sampled at {time_text(sampled)} as in "
                f"{origin.row(first)}; expected each result once"
            )
            raise origin.fault(message, second)
        newest[sample] = (reported, {value: row} if reported > before else values | {value: row})


def _uncertainty(table: Table, wanted: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Seconds, 0 where none is given; numbers are seconds, text may carry its unit."""
    if UNCERTAINTY not in table.columns or pa.types.is_null(table.columns[UNCERTAINTY].type):
        return np.zeros(table.rows)
    if pa.types.is_duration(table.columns[UNCERTAINTY].type):
        spans = table.columns[UNCERTAINTY].to_numpy(zero_copy_only=False).astype("timedelta64[us]")
        seconds = np.where(np.isnat(spans), 0.0, spans.view(np.int64) / 1e6)
    elif pa.types.is_floating(table.columns[UNCERTAINTY].type) or pa.types.is_integer(
        table.columns[UNCERTAINTY].type
    ):
        seconds = np.nan_to_num(number_column(table, UNCERTAINTY, among=wanted), nan=0.0)
    else:
        cells = text_column(table, UNCERTAINTY)
        seconds = np.array(
            [_seconds(table, row, cell) if wanted[row] else 0.0 for row, cell in enumerate(cells)]
        )
    negative = (seconds < 0.0) & wanted
    if negative.any():
        row = int(negative.argmax())
        raise table.origin.fault(f"expected no time below zero, found {seconds[row]} s", row, UNCERTAINTY)
    return seconds


def _seconds(table: Table, row: int, cell: str | None) -> float:
    if cell is None:
        return 0.0
    number = as_number(cell)
    if number is not None and math.isfinite(number):
        return number
    try:
        return parse_duration(cell)
    except UnitError:
        message = f'expected seconds or a time such as "5 min", found {cell!r}'
        raise table.origin.fault(message, row, UNCERTAINTY) from None
