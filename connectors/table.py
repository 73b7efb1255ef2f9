"""A table from a file or a data frame: names, wanted columns as Arrow arrays, and where a fault lies."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
from numpy.typing import NDArray

from connectors.errors import ConnectorError

Column = Any
"""A pyarrow Array (pyarrow ships no types)."""


@dataclass(frozen=True)
class Origin:
    """Where a table comes from, and how its faults are told: ``name: row 12 (line 13), column TI1: ...``."""

    name: str
    error: type[ConnectorError]
    line_of_row: Callable[[int], int | None] | None = None
    """The text line of a row, both counted from 1; asked only when there is a fault."""
    rows_before: int = 0
    """Rows of the file that stand before this table's."""

    def fault(self, message: str, row: int | None = None, column: str | None = None) -> ConnectorError:
        """The error to raise; ``row`` is an index from 0, told from 1."""
        places = []
        if row is not None:
            places.append(self.row(row))
        if column is not None:
            places.append(f"column {column}")
        return self.error(": ".join(filter(None, [self.name, ", ".join(places), message])))

    def row(self, row: int) -> str:
        """``row 12``, or ``row 12 (line 13)`` of a text file; ``row`` is an index from 0."""
        place = self.rows_before + row + 1
        line = self.line_of_row(place) if self.line_of_row else None
        return f"row {place}" if line is None else f"row {place} (line {line})"


@dataclass(frozen=True)
class Table:
    """Column names in order, the wanted columns that are there, and the number of rows."""

    origin: Origin
    names: tuple[str, ...]
    columns: Mapping[str, Column]
    rows: int
    numbers_as_text: bool = False
    """True for text files that need a second look: numbers are still text."""


def check_names(origin: Origin, names: tuple[str, ...]) -> None:
    """Refuse a column name that is there twice."""
    for position, name in enumerate(names):
        if name in names[:position]:
            message = "this name stands over more than one column; expected each name once"
            raise origin.fault(message, column=name)


def is_parquet(path: Path, origin: Origin) -> bool:
    """Whether a file is Parquet, by its name or its first bytes; refuses what is no readable file."""
    if path.is_dir():
        raise origin.fault("is a folder; expected a CSV or Parquet file")
    try:
        with path.open("rb") as file:
            start = file.read(4)
    except FileNotFoundError:
        raise origin.fault("there is no such file") from None
    except (OSError, ValueError) as error:
        raise origin.fault(f"cannot be read: {error}") from error
    if not start:
        raise origin.fault("is empty; expected a CSV or Parquet file")
    return start == b"PAR1" or path.suffix.lower() in (".parquet", ".pq")


def parquet_table(path: Path, origin: Origin, wanted: Callable[[str], bool]) -> Table:
    """The wanted columns of a Parquet file."""
    with _parquet_file(path, origin) as file:
        names = tuple(file.schema_arrow.names)
        check_names(origin, names)
        content = file.read(columns=[name for name in names if wanted(name)])
        rows = file.metadata.num_rows
    columns = {name: _single(content.column(name)) for name in content.column_names if wanted(name)}
    return Table(origin, names, columns, rows)


def parquet_parts(path: Path, origin: Origin, wanted: Callable[[str], bool], rows: int) -> Iterator[Table]:
    """The same, at most ``rows`` rows at a time; faults tell the row of the file."""
    with _parquet_file(path, origin) as file:
        names = tuple(file.schema_arrow.names)
        check_names(origin, names)
        chosen, before = [name for name in names if wanted(name)], 0
        for batch in file.iter_batches(batch_size=rows, columns=chosen):
            columns = {name: _single(batch.column(name)) for name in batch.schema.names if wanted(name)}
            yield Table(replace(origin, rows_before=before), names, columns, batch.num_rows)
            before += batch.num_rows


def parquet_rows(path: Path, origin: Origin) -> int:
    """How many rows a Parquet file has."""
    with _parquet_file(path, origin) as file:
        return int(file.metadata.num_rows)


def parquet_end(path: Path, origin: Origin, name: str) -> Table:
    """One column of the last rows of a Parquet file that has any: those of its last group."""
    with _parquet_file(path, origin) as file:
        names = tuple(file.schema_arrow.names)
        last = next(k for k in range(file.num_row_groups - 1, -1, -1) if file.metadata.row_group(k).num_rows)
        content = file.read_row_group(last, columns=[name])
        before = sum(file.metadata.row_group(k).num_rows for k in range(last))
    columns = {name: _single(content.column(name))}
    return Table(replace(origin, rows_before=before), names, columns, content.num_rows)


@contextmanager
def _parquet_file(path: Path, origin: Origin) -> Iterator[Any]:
    try:
        with pq.ParquetFile(path) as file:
            yield file
    except (pa.ArrowException, OSError) as error:
        message = f"is not a whole Parquet file, truncated or damaged: {_one_line(error)}"
        raise origin.fault(message) from error


def frame_table(frame: pd.DataFrame, origin: Origin, wanted: Callable[[str], bool]) -> Table:
    """The wanted columns of a data frame."""
    names = tuple(str(name) for name in frame.columns)
    check_names(origin, names)
    columns = {
        name: _from_pandas(frame.iloc[:, position], name, origin)
        for position, name in enumerate(names)
        if wanted(name)
    }
    return Table(origin, names, columns, len(frame))


def number_column(table: Table, name: str, among: NDArray[np.bool_] | None = None) -> NDArray[np.float64]:
    """A column as float64 (rows,), nan where empty; text and infinite numbers are refused.

    :param among: only these rows are looked at; nan elsewhere where a row holds no number.
    """
    column = table.columns[name]
    kind = column.type
    if pa.types.is_null(kind):
        return np.full(table.rows, np.nan)
    if pa.types.is_string(kind) or pa.types.is_large_string(kind):
        values = _numbers_from_text(table, name, column, among)
    elif pa.types.is_floating(kind) or pa.types.is_integer(kind) or pa.types.is_decimal(kind):
        values = np.asarray(pc.cast(column, pa.float64(), safe=False).to_numpy(zero_copy_only=False))
    else:
        raise table.origin.fault(f"expected numbers, found a column of {kind}", column=name)
    infinite = np.isinf(values) if among is None else np.isinf(values) & among
    if infinite.any():
        row = int(infinite.argmax())
        raise table.origin.fault(f"expected a finite number, found {values[row]}", row, name)
    return values


def text_column(table: Table, name: str) -> list[str | None]:
    """A column as text, None where empty; numbers are refused."""
    column = table.columns[name]
    if pa.types.is_null(column.type):
        return [None] * table.rows
    if not (pa.types.is_string(column.type) or pa.types.is_large_string(column.type)):
        raise table.origin.fault(f"expected text, found a column of {column.type}", column=name)
    return [None if cell is None or not cell.strip() else cell.strip() for cell in column.to_pylist()]


def as_number(text: str) -> float | None:
    """The number that a cell's text stands for: digits with a point, nan or inf; None for anything else."""
    if "_" in text:
        return None
    try:
        return float(text)
    except ValueError:
        return None


def _numbers_from_text(
    table: Table, name: str, column: Column, among: NDArray[np.bool_] | None
) -> NDArray[np.float64]:
    values = np.full(table.rows, np.nan)
    for row, cell in enumerate(column.to_pylist()):
        if cell is None or not cell.strip() or (among is not None and not among[row]):
            continue
        number = as_number(cell) if table.numbers_as_text else None
        if number is None:
            raise table.origin.fault(f"expected a number such as 92.4, found the text {cell!r}", row, name)
        values[row] = number
    return values


def _from_pandas(series: pd.Series[Any], name: str, origin: Origin) -> Column:
    """A data frame's column as an Arrow array; nan and None become null; times keep their offsets."""
    if series.dtype == object:
        return _from_objects(series.tolist(), name, origin)
    try:
        return _single(pa.Array.from_pandas(series))
    except (pa.ArrowException, TypeError, ValueError) as error:
        raise origin.fault(f"cannot be read: {_one_line(error)}", column=name) from error


def _from_objects(cells: list[Any], name: str, origin: Origin) -> Column:
    """Objects are text and times (as text with their offsets), or numbers; never both."""
    plain = [
        None if cell is None or cell is pd.NaT or cell is pd.NA or cell != cell else cell for cell in cells
    ]
    plain = [cell.isoformat() if isinstance(cell, date) else cell for cell in plain]
    kinds = {isinstance(cell, str) for cell in plain if cell is not None}
    if kinds == {True, False}:
        row = next(row for row, cell in enumerate(plain) if isinstance(cell, str))
        raise origin.fault(f"expected numbers or text, found both; here the text {plain[row]!r}", row, name)
    try:
        return pa.array(plain)
    except (pa.ArrowException, TypeError, ValueError, OverflowError) as error:
        raise origin.fault(f"cannot be read: {_one_line(error)}", column=name) from error


def _single(column: Column) -> Column:
    """One contiguous array, categories replaced by what they stand for."""
    whole = column.combine_chunks() if isinstance(column, pa.ChunkedArray) else column
    if isinstance(whole, pa.ChunkedArray):
        whole = pa.concat_arrays(whole.chunks) if whole.num_chunks else pa.array([], type=whole.type)
    if pa.types.is_dictionary(whole.type):
        whole = whole.dictionary_decode()
    if pa.types.is_string_view(whole.type):
        whole = pc.cast(whole, pa.large_string())
    return whole


def _one_line(error: BaseException) -> str:
    return " ".join(str(error).split())
