"""Laboratory results that are read, refused, or left out because of their times."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from connectors.errors import LabFileError
from connectors.files import LabResults, lab_from_frame, place_lab, read_lab

START = 1_767_225_600_000_000
"""2026-01-01T00:00:00Z in microseconds (COMPUTED)."""
MINUTE = 60_000_000
HEADER = "sampled_at,reported_at,tag,value,time_uncertainty\n"
UNCERTAINTY = "row 1 (line 2), column time_uncertainty:"
ROW = "2026-01-01T00:00:00Z,2026-01-01T00:40:00Z,AL1,1.32"


def from_text(folder: Path, text: str, timezone: str | None = None) -> LabResults:
    file = folder / "lab.csv"
    file.write_bytes(text.encode("utf-8"))
    return read_lab(file, ["AL1", "AL2"], timezone)


def refusal(folder: Path, text: str, timezone: str | None = None) -> list[str]:
    with pytest.raises(LabFileError) as caught:
        from_text(folder, text, timezone)
    return [line.removeprefix(f"{folder / 'lab.csv'}: ") for line in caught.value.lines]


def test_results_come_in_the_order_of_their_reports(tmp_path: Path) -> None:
    text = (
        HEADER
        + "2026-01-01T01:00:00Z,2026-01-01T01:40:00Z,AL2,7,\n"
        + "2026-01-01T00:00:00Z,2026-01-01T02:00:00Z,AL1,1.32,5 min\n"
        + "2026-01-01T01:00:00+01:00,2026-01-01T00:40:00Z,AL1,1.30,90\n"
        + "2026-01-01T00:30:00Z,2026-01-01T01:40:00Z,AL1,1.31,\n"
        + "2026-01-01T00:30:00Z,2026-01-01T01:40:00Z,XX9,below 0.1,\n"
    )
    lab = from_text(tmp_path, text)
    assert [lab.tag(result) for result in range(len(lab))] == ["AL1", "AL2", "AL1", "AL1"]
    assert lab.values.tolist() == [1.30, 7.0, 1.31, 1.32]
    assert ((lab.sampled_at - START) // MINUTE).tolist() == [0, 60, 30, 0]
    assert ((lab.reported_at - START) // MINUTE).tolist() == [40, 100, 100, 120]
    assert lab.time_uncertainty.tolist() == [90.0, 0.0, 0.0, 300.0]
    assert lab.rows.tolist() == [3, 1, 4, 2]
    assert lab.tags == ("AL1", "AL2")
    assert lab.ignored_tags == ("XX9",)
    assert lab.ignored_columns == ()


def test_uncertainty_may_be_left_out_and_other_columns_are_named(tmp_path: Path) -> None:
    lab = from_text(tmp_path, f"analyst,sampled_at,reported_at,tag,value\nKL,{ROW}\n")
    assert lab.time_uncertainty.tolist() == [0.0]
    assert lab.ignored_columns == ("analyst",)


def test_a_file_without_rows_has_no_results(tmp_path: Path) -> None:
    lab = from_text(tmp_path, HEADER)
    assert len(lab) == 0
    assert len(lab_from_frame(pd.DataFrame(columns=HEADER.strip().split(",")), ["AL1"])) == 0
    assert place_lab(lab, 0, 1)[1] == ()


def test_two_different_values_of_one_sample_both_count(tmp_path: Path) -> None:
    lab = from_text(tmp_path, f"{HEADER}{ROW},\n{ROW}1,\n")
    assert lab.values.tolist() == [1.32, 1.321]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (
            f"{HEADER}{ROW},\n2026-01-01T00:00:00Z,2026-01-01T03:00:00Z,AL1,1.320,\n",
            "row 2 (line 3): the same result of AL1 sampled at 2026-01-01T00:00:00Z as in row 1 (line 2); "
            "expected each result once",
        ),
        (
            f"{HEADER}2026-01-01T00:40:00Z,2026-01-01T00:39:59Z,AL1,1.32,\n",
            "row 1 (line 2), column reported_at: 2026-01-01T00:39:59Z is before the sampling at "
            "2026-01-01T00:40:00Z; expected it after",
        ),
        (
            f"{HEADER}2026-01-01T00:00:00,2026-01-01T00:40:00Z,AL1,1.32,\n",
            "row 1 (line 2), column sampled_at: 2026-01-01T00:00:00 has no offset from UTC; write one, "
            "or name the time zone with --timezone",
        ),
        (
            f"{HEADER}2026-01-01T00:00:00Z,,AL1,1.32,\n",
            "row 1 (line 2), column reported_at: expected a time such as 2026-01-31T14:00:00Z or "
            "2026-01-31T15:00:00+01:00, found an empty cell",
        ),
        (
            f"{HEADER}2026-01-01T00:00:00Z,2026-01-01T00:40:00Z,AL1,below 0.1,\n",
            "row 1 (line 2), column value: expected a number such as 92.4, found the text 'below 0.1'",
        ),
        (
            f"{HEADER}2026-01-01T00:00:00Z,2026-01-01T00:40:00Z,AL1,,\n",
            "row 1 (line 2), column value: expected a number, found none",
        ),
        (
            f"{HEADER}2026-01-01T00:00:00Z,2026-01-01T00:40:00Z,AL1,nan,\n",
            "row 1 (line 2), column value: expected a number, found none",
        ),
        (
            f"{HEADER}2026-01-01T00:00:00Z,2026-01-01T00:40:00Z,AL1,inf,\n",
            "row 1 (line 2), column value: expected a finite number, found inf",
        ),
        (
            f"{HEADER}2026-01-01T00:00:00Z,2026-01-01T00:40:00Z,,1.32,\n",
            "row 1 (line 2), column tag: expected a tag, found an empty cell",
        ),
        (
            f"{HEADER}{ROW},soon\n",
            f"{UNCERTAINTY} expected seconds or a time such as \"5 min\", found 'soon'",
        ),
        (
            f"{HEADER}{ROW},-1\n",
            "row 1 (line 2), column time_uncertainty: expected no time below zero, found -1.0 s",
        ),
        (
            f"{HEADER}{ROW},inf\n",
            f"{UNCERTAINTY} expected seconds or a time such as \"5 min\", found 'inf'",
        ),
        ("", "is empty; expected a CSV or Parquet file"),
    ],
)
def test_bad_files_are_refused(tmp_path: Path, text: str, said: str) -> None:
    assert refusal(tmp_path, text) == [said]


def test_every_column_that_is_lacking_is_named(tmp_path: Path) -> None:
    assert refusal(tmp_path, "sampled_at,tag,result\n") == [
        "no column 'reported_at'; expected sampled_at, reported_at, tag, value",
        "no column 'value'; expected sampled_at, reported_at, tag, value",
    ]


def test_local_times_of_both_columns(tmp_path: Path) -> None:
    text = HEADER + "2026-10-25T01:30:00,2026-10-25T03:30:00,AL1,1.32,\n"
    lab = from_text(tmp_path, text, "Europe/Berlin")
    assert (lab.reported_at - lab.sampled_at).tolist() == [180 * MINUTE]
    twice = HEADER + "2026-10-25T01:30:00,2026-10-25T02:30:00,AL1,1.32,\n"
    assert (
        "column reported_at: 2026-10-25T02:30:00 occurs twice" in refusal(tmp_path, twice, "Europe/Berlin")[0]
    )


def lab_frame(**columns: object) -> pd.DataFrame:
    sampled = pd.date_range("2026-01-01", periods=3, freq="1h", tz="UTC")
    base: dict[str, object] = {
        "sampled_at": sampled,
        "reported_at": sampled + pd.Timedelta(minutes=40),
        "tag": ["AL1", "AL2", "AL1"],
        "value": [1.0, 2.0, 3.0],
    }
    return pd.DataFrame(base | columns)


@pytest.mark.parametrize(
    "uncertainty",
    [
        [60.0, float("nan"), 300.0],
        ["1 min", None, "5 min"],
        ["60", None, "300"],
        pd.to_timedelta(["1 min", None, "5 min"]),
        pd.array([60, None, 300], dtype="Int64"),
    ],
)
def test_frames_and_parquet_files_are_read_alike(tmp_path: Path, uncertainty: object) -> None:
    frame = lab_frame(time_uncertainty=uncertainty)
    frame.to_parquet(tmp_path / "lab.parquet")
    for lab in (lab_from_frame(frame, ["AL1", "AL2"]), read_lab(tmp_path / "lab.parquet", ["AL1", "AL2"])):
        assert lab.time_uncertainty.tolist() == [60.0, 0.0, 300.0]
        assert lab.tag_index.tolist() == [0, 1, 0]
        assert lab.values.tolist() == [1.0, 2.0, 3.0]
        assert np.all(lab.reported_at - lab.sampled_at == 40 * MINUTE)


def test_bad_frames_are_refused() -> None:
    with pytest.raises(LabFileError, match="lab: column tag: expected text, found a column of int64"):
        lab_from_frame(lab_frame(tag=[1, 2, 3]), ["AL1"])
    with pytest.raises(LabFileError, match="lab: row 3, column value: expected a number, found none"):
        lab_from_frame(lab_frame(value=[1.0, 2.0, None]), ["AL1"])
    with pytest.raises(LabFileError, match="lab: row 1, column value: expected a number such as"):
        lab_from_frame(lab_frame(value=["1", "2", "3"]), ["AL1"])
    with pytest.raises(
        LabFileError, match="lab: row 2, column time_uncertainty: expected no time below zero"
    ):
        lab_from_frame(lab_frame(time_uncertainty=[0.0, -1.0, 0.0]), ["AL2"])
    with pytest.raises(LabFileError, match="June: no column 'value'"):
        lab_from_frame(lab_frame().drop(columns="value"), ["AL1"], name="June")


def test_truncated_parquet_is_refused(tmp_path: Path) -> None:
    file = tmp_path / "lab.parquet"
    lab_frame().to_parquet(file)
    file.write_bytes(file.read_bytes()[:-9])
    with pytest.raises(
        LabFileError, match=r"lab\.parquet: is not a whole Parquet file, truncated or damaged"
    ):
        read_lab(file, ["AL1"])


def test_results_that_no_cycle_can_see_are_left_out_and_named() -> None:
    """Cycles run from 00:30 to 02:30; samples are taken at 00:00, 01:00, 02:00, reported 40 minutes later."""
    lab = lab_from_frame(lab_frame(), ["AL1", "AL2"])
    usable, notes = place_lab(lab, START + 30 * MINUTE, START + 150 * MINUTE)
    assert usable.values.tolist() == [2.0]
    assert notes == (
        "lab: row 1, AL1: left out, sampled at 2026-01-01T00:00:00Z, "
        "before the first cycle at 2026-01-01T00:30:00Z",
        "lab: row 3, AL1: left out, reported at 2026-01-01T02:40:00Z, "
        "after the last cycle at 2026-01-01T02:30:00Z",
    )


def test_results_on_the_edges_are_used_and_those_of_the_future_are_not() -> None:
    lab = lab_from_frame(lab_frame(), ["AL1", "AL2"])
    usable, notes = place_lab(lab, START, START + 100 * MINUTE)
    assert usable.values.tolist() == [1.0, 2.0]
    assert notes == (
        "lab: row 3, AL1: left out, sampled at 2026-01-01T02:00:00Z, "
        "after the last cycle at 2026-01-01T01:40:00Z",
    )


def test_a_value_reported_later_corrects_and_may_return_to_an_earlier_one() -> None:
    frame = pd.DataFrame(
        {
            "sampled_at": ["2026-12-01T08:00:00Z"] * 4,
            "reported_at": [f"2026-12-01T{hour:02d}:00:00Z" for hour in (12, 9, 9, 11)],
            "tag": "AL1",
            "value": [1.33, 1.33, 1.35, 1.34],
        }
    )
    found = lab_from_frame(frame, ["AL1"])
    assert found.values.tolist() == [1.33, 1.35, 1.34, 1.33]
    assert found.rows.tolist() == [2, 3, 4, 1]


@pytest.mark.parametrize("hour", [9, 10])
def test_the_same_value_again_is_a_copied_row(hour: int) -> None:
    frame = pd.DataFrame(
        {
            "sampled_at": ["2026-12-01T08:00:00Z"] * 2,
            "reported_at": [f"2026-12-01T{at:02d}:00:00Z" for at in (hour, 9)],
            "tag": "AL1",
            "value": [1.33, 1.33],
        }
    )
    with pytest.raises(LabFileError, match=r"row 2: .*as in .*row 1; expected each result once"):
        lab_from_frame(frame, ["AL1"])
