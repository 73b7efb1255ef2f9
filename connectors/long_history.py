"""A long history in a Parquet file, read a stretch of rows at a time: what is held does not grow with its length.

A fault in its middle is told, with its row, when the reading comes to it. Row groups are read one at a time, so a file that
is one huge group costs the memory of that group.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from connectors.errors import HistoryFileError
from connectors.history import History
from connectors.history_file import TIME, history_of, read_history, wanted_columns
from connectors.table import Origin, is_parquet, parquet_end, parquet_parts, parquet_rows
from connectors.time_column import time_column, time_text, time_zone

ROWS = 1 << 17
"""Read at a time; a file with no more rows is read whole."""


@dataclass(frozen=True)
class LongHistory:
    """A history that stays in its file; the fields are those of :class:`connectors.history.History`."""

    name: str
    tags: tuple[str, ...]
    first_time: int
    last_time: int
    ignored_columns: tuple[str, ...]
    path: Path
    timezone: str | None

    def parts(self) -> Iterator[History]:
        """The history in stretches, in order of time.

        :raises HistoryFileError: with file, row, column and what was expected.
        """
        origin, last = Origin(self.name, HistoryFileError), None
        for table in parquet_parts(self.path, origin, wanted_columns(self.tags), ROWS):
            part = history_of(table, self.tags, self.timezone)
            if last is not None and part.first_time <= last:
                raise table.origin.fault(
                    f"{time_text(part.first_time)} is not after {time_text(last)} in the row before; expected each time "
                    "once, in increasing order",
                    0,
                    TIME,
                )
            last = part.last_time
            yield part


def open_history(path: str | Path, tags: Sequence[str], timezone: str | None = None) -> History | LongHistory:
    """A long Parquet file as it lies there; any other history read whole.

    :raises HistoryFileError: as :func:`connectors.history_file.read_history`; of a long file what its ends show.
    """
    file = Path(path)
    origin = Origin(str(path), HistoryFileError)
    if not is_parquet(file, origin) or parquet_rows(file, origin) <= ROWS:
        return read_history(path, tags, timezone)
    first = history_of(next(parquet_parts(file, origin, wanted_columns(tags), ROWS)), tags, timezone)
    end = time_column(parquet_end(file, origin, TIME), TIME, time_zone(timezone, origin))
    return LongHistory(
        str(path), tuple(tags), first.first_time, int(end[-1]), first.ignored_columns, file, timezone
    )
