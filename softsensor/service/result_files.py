"""The result files of a replay: written as the cycles run, whole or not at all."""

from __future__ import annotations

import contextlib
import json
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Any, Literal

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from softsensor.cycle import UnitDesign
from softsensor.errors import ReplayError
from softsensor.estimation.smoothing import SmoothedCycles
from softsensor.service.replay import Replay, Stretch
from softsensor.service.result_tables import (
    conformance_table,
    estimate_table,
    flag_table,
    hypothesis_table,
    innovation_table,
    lab_table,
    smoothed_table,
)

Format = Literal["csv", "parquet"]
ROWS = 60_000
"""Rows gathered before they are written."""
TIME_FORMAT = "%Y-%m-%dT%H:%M:%S.%fZ"
FULL_PRECISION = "%.17g"


@contextmanager
def _plain_errors(path: Path) -> Iterator[None]:
    """A disk that is full, or a folder that cannot be written, in one line."""
    try:
        yield
    except OSError as error:
        raise ReplayError(f"{path}: cannot be written: {error.strerror or error}") from None


class TableFile:
    """One result table on its way to disk, under a temporary name until it is finished."""

    def __init__(self, folder: Path, name: str, kind: Format) -> None:
        self.path = folder / f"{name}.{kind}"
        self._part = folder / f".{name}.{kind}.part"
        self._kind = kind
        self._waiting: list[pd.DataFrame] = []
        self._rows = 0
        self._writer: pq.ParquetWriter | None = None
        self._begun = False

    def add(self, table: pd.DataFrame) -> None:
        """Gather rows, and write once there are enough."""
        self._waiting.append(table)
        self._rows += len(table)
        if self._rows >= ROWS:
            self._write()

    def close(self) -> None:
        """Write what is left; the file is whole, under its temporary name."""
        self._write()
        with _plain_errors(self.path):
            if self._writer is not None:
                self._writer.close()
                self._writer = None

    def name(self) -> None:
        """Give the file its name; one of that name before it is gone."""
        with _plain_errors(self.path):
            self._part.replace(self.path)

    def drop(self) -> None:
        """Remove what was begun; why it has to go is told already, so a disk that refuses once more adds nothing."""
        with contextlib.suppress(OSError):
            if self._writer is not None:
                self._writer.close()
        self._writer = None
        with contextlib.suppress(OSError):
            self._part.unlink(missing_ok=True)

    def _write(self) -> None:
        if not self._waiting:
            return
        table = pd.concat(self._waiting, ignore_index=True) if len(self._waiting) > 1 else self._waiting[0]
        self._waiting, self._rows = [], 0
        with _plain_errors(self.path):
            if self._kind == "csv":
                self._write_csv(table)
            else:
                self._write_parquet(table)
        self._begun = True

    def _write_csv(self, table: pd.DataFrame) -> None:
        table.to_csv(
            self._part,
            mode="a" if self._begun else "w",
            header=not self._begun,
            index=False,
            float_format=FULL_PRECISION,
            date_format=TIME_FORMAT,
            encoding="utf-8",
            lineterminator="\n",
        )

    def _write_parquet(self, table: pd.DataFrame) -> None:
        plain = table.assign(
            **{name: table[name].astype(str) for name in ("tag", "status", "reason") if name in table}
        )
        content = pa.Table.from_pandas(plain, preserve_index=False)
        if self._writer is None:
            self._writer = pq.ParquetWriter(self._part, content.schema)
        self._writer.write_table(content.cast(self._writer.schema))


class ResultFiles:
    """All files of one replay in one folder; left without :meth:`finish`, nothing stays behind.

    Files get their names once all of them are whole, so that a full disk leaves earlier results as they were.
    """

    def __init__(self, folder: Path, kind: Format, design: UnitDesign) -> None:
        self._folder = folder
        self._kind = kind
        self._design = design
        with _plain_errors(folder):
            folder.mkdir(parents=True, exist_ok=True)
        self._summary = folder / ".summary.json.part"
        self._files: dict[str, TableFile] = {}
        self._finished = False

    def __enter__(self) -> ResultFiles:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if not self._finished:
            for file in self._files.values():
                file.drop()
            with contextlib.suppress(OSError):
                self._summary.unlink(missing_ok=True)

    def add(self, stretch: Stretch) -> None:
        """Write a stretch of cycles."""
        self._add("estimates", estimate_table(self._design, stretch.readings, stretch.results))
        self._add("innovations", innovation_table(self._design, stretch.results))
        self._add("conformance", conformance_table(self._design, stretch.results))

    def add_smoothed(self, cycles: SmoothedCycles) -> None:
        """Write smoothed estimates; they come once all stretches are written."""
        self._add("smoothed", smoothed_table(self._design, cycles))

    def _add(self, name: str, table: pd.DataFrame) -> None:
        if name not in self._files:
            self._files[name] = TableFile(self._folder, name, self._kind)
        self._files[name].add(table)

    def finish(self, running: Replay) -> dict[str, Any]:
        """Write flags, laboratory results and summary, give all files their names; returns the summary."""
        summary = running.totals.as_dict(running.digest)
        if not summary["cycles"]:
            raise ReplayError(
                "history: no cycle lies within it; expected at least one row at or after a cycle"
            )
        flags = list(running.totals.flags.values())
        self._add("flags", flag_table(flags))
        self._add("hypotheses", hypothesis_table(flags))
        self._add("lab_results", lab_table(running.totals.labs))
        for file in self._files.values():
            file.close()
        path = self._folder / "summary.json"
        with _plain_errors(path):
            text = json.dumps(summary, indent=2, ensure_ascii=False, allow_nan=False)
            self._summary.write_text(text + "\n", encoding="utf-8")
        for file in self._files.values():
            file.name()
        with _plain_errors(path):
            self._summary.replace(path)
        self._finished = True
        return summary
