"""Files of late readings: read in the order of their arrival, or refused with row and column."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from connectors.errors import HistoryFileError
from connectors.files import LateRows, late_from_frame, read_late

START = 1_767_225_600_000_000
"""2026-01-01T00:00:00Z in microseconds (COMPUTED)."""
HEADER = "time,arrived_at,tag,value,quality\n"
ROW = "2026-01-01T00:00:00Z,2026-01-01T00:10:00Z,TI1,92.4,\n"


def from_text(folder: Path, text: str, timezone: str | None = None) -> LateRows:
    file = folder / "late.csv"
    file.write_text(text, encoding="utf-8")
    return read_late(file, ["FI1", "TI1"], timezone)


def test_rows_come_in_the_order_of_arrival_and_others_tags_are_named(tmp_path: Path) -> None:
    text = HEADER + ROW + "2026-01-01T00:00:10Z,2026-01-01T00:05:00Z,FI1,,Bad\n"
    text += "2026-01-01T00:00:20Z,2026-01-01T00:10:00Z,TI1,92.5,Uncertain\n"
    found = from_text(tmp_path, text + "2026-01-01T00:00:20Z,2026-01-01T00:10:00Z,XI9,1,\n")
    assert found.times.tolist() == [START + 10_000_000, START, START + 20_000_000]
    assert [found.tags[k] for k in found.tag_index] == ["FI1", "TI1", "TI1"]
    assert found.qualities.tolist() == [2, 0, 1]
    np.testing.assert_array_equal(found.values, [np.nan, 92.4, 92.5])
    assert (found.ignored_tags, found.longest, len(found)) == (("XI9",), 600.0, 3)


def test_parquet_and_frames_are_read_alike(tmp_path: Path) -> None:
    frame = pd.DataFrame(
        {
            "time": ["2026-01-01T00:00:00Z"],
            "arrived_at": ["2026-01-01T00:10:00Z"],
            "tag": "TI1",
            "value": 92.4,
        }
    )
    frame.to_parquet(tmp_path / "late.parquet")
    for found in (read_late(tmp_path / "late.parquet", ["TI1"]), late_from_frame(frame, ["TI1"])):
        assert (found.times.tolist(), found.values.tolist(), found.qualities.tolist()) == (
            [START],
            [92.4],
            [0],
        )


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("time,arrived_at,tag\n", "no column 'value'; expected time, arrived_at, tag, value"),
        (
            HEADER + ROW.replace("00:10:00Z", "00:00:00Z").replace("00:00:00Z", "00:10:00Z", 1),
            "row 1 (line 2)",
        ),
        (HEADER + ROW.replace("92.4", ""), "column value: expected a number, or the quality Bad"),
        (HEADER + ROW.replace("TI1", ""), "column tag: expected a tag, found an empty cell"),
        (HEADER + ROW.replace("92.4,", "92.4,3"), "column quality: expected Good, Uncertain, Bad"),
        (HEADER + ROW.replace("Z", ""), "2026-01-01T00:00:00"),
    ],
)
def test_what_cannot_be_read_is_refused(tmp_path: Path, text: str, expected: str) -> None:
    with pytest.raises(HistoryFileError) as refused:
        from_text(tmp_path, text)
    assert expected in "\n".join(refused.value.lines)


def test_a_file_without_rows_has_none(tmp_path: Path) -> None:
    assert (len(from_text(tmp_path, HEADER)), from_text(tmp_path, HEADER).longest) == (0, 0.0)
