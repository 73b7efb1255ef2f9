"""CSV text, quickly through Arrow; only a file with a fault is read again, row by row, to say where it is."""

from __future__ import annotations

import csv
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

import pyarrow as pa
import pyarrow.csv as pa_csv

from connectors.table import Column, Origin, Table, check_names


def csv_table(
    path: Path, origin: Origin, wanted: Callable[[str], bool], is_number: Callable[[str], bool]
) -> Table:
    """The wanted columns of a CSV file: UTF-8, comma-separated, a header line, numbers with a point.

    :raises ConnectorError: of the origin's kind, saying row, line and what was expected.
    """
    origin = replace(origin, line_of_row=lambda row: _line_of_row(path, row))
    names, header_lines = _header(path, origin)
    check_names(origin, names)
    columns = [name for name in names if wanted(name)]
    types = {name: pa.float64() if is_number(name) else pa.string() for name in columns}
    try:
        content = _read(path, names, header_lines, types)
        as_text = False
    except (pa.ArrowException, OSError):
        content, as_text = _read_as_text(path, origin, names, header_lines, columns), True
    found = {name: _whole(content.column(name)) for name in columns}
    return Table(origin, names, found, content.num_rows, as_text)


def _read(path: Path, names: tuple[str, ...], header_lines: int, types: dict[str, Column]) -> Column:
    return pa_csv.read_csv(
        str(path),
        read_options=pa_csv.ReadOptions(column_names=list(names), skip_rows=header_lines, encoding="utf8"),
        convert_options=pa_csv.ConvertOptions(
            column_types=types,
            include_columns=list(types),
            null_values=[""],
            strings_can_be_null=True,
            quoted_strings_can_be_null=True,
        ),
    )


def _read_as_text(
    path: Path, origin: Origin, names: tuple[str, ...], header_lines: int, columns: list[str]
) -> Column:
    try:
        return _read(path, names, header_lines, {name: pa.string() for name in columns})
    except (pa.ArrowException, OSError) as error:
        _look_at_every_row(path, origin, len(names))
        raise origin.fault(f"cannot be read: {' '.join(str(error).split())}") from error


def _header(path: Path, origin: Origin) -> tuple[tuple[str, ...], int]:
    """The column names, and how many text lines they and blank lines before them take."""
    with path.open(encoding="utf-8-sig", newline="") as file:
        reader = csv.reader(file)
        try:
            cells = next((row for row in reader if any(cell.strip() for cell in row)), None)
        except UnicodeDecodeError as error:
            raise _not_utf8(path, origin) from error
        except csv.Error as error:
            raise origin.fault(f"the header line cannot be read: {error}") from error
        lines = reader.line_num
    if cells is None:
        raise origin.fault("is empty; expected a header line with column names")
    if len(cells) == 1 and any(mark in cells[0] for mark in ";\t|"):
        raise origin.fault(f"expected columns separated by commas, found the header {cells[0]!r}")
    names = (cell.strip() or f"(column {place} without a name)" for place, cell in enumerate(cells, 1))
    return tuple(names), lines


def _look_at_every_row(path: Path, origin: Origin, width: int) -> None:
    """Raise the first fault in the file's structure, if one is found."""
    try:
        for row, (line, cells) in enumerate(_rows(path)):
            if len(cells) != width:
                where = f"row {row + 1} (line {line})"
                raise origin.fault(f"{where}: expected {width} cells as in the header, found {len(cells)}")
    except UnicodeDecodeError as error:
        raise _not_utf8(path, origin) from error
    except csv.Error as error:
        raise origin.fault(f"cannot be read as CSV: {error}") from error


def _not_utf8(path: Path, origin: Origin) -> Exception:
    with path.open("rb") as file:
        for number, line in enumerate(file, 1):
            try:
                line.decode("utf-8")
            except UnicodeDecodeError as error:
                byte = line[error.start]
                return origin.fault(f"line {number}: expected UTF-8 text, found the byte 0x{byte:02x}")
    return origin.fault("expected UTF-8 text")


def _rows(path: Path) -> Iterator[tuple[int, list[str]]]:
    """The rows after the header with their line numbers from 1, blank lines left out."""
    with path.open(encoding="utf-8-sig", newline="") as file:
        reader = csv.reader(file)
        header = True
        for cells in reader:
            if not cells:
                continue
            if not header:
                yield reader.line_num, cells
            header = False


def _line_of_row(path: Path, row: int) -> int | None:
    """The text line of a row; both from 1. None where the file cannot be read that far."""
    try:
        return next((line for number, (line, _) in enumerate(_rows(path), 1) if number == row), None)
    except (OSError, UnicodeDecodeError, csv.Error):
        return None


def _whole(column: Column) -> Column:
    return pa.concat_arrays(column.chunks) if column.num_chunks else pa.array([], type=column.type)
