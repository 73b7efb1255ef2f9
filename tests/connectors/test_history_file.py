"""Histories that are read, and histories that are refused with what was expected."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import numpy as np
import pandas as pd
import pytest

from connectors.errors import HistoryFileError
from connectors.files import History, history_from_frame, read_history
from connectors.history import TagSeries
from connectors.readings import Quality

START = 1_767_225_600_000_000
"""2026-01-01T00:00:00Z in microseconds: 20,454 days of 86,400 s after 1970 (COMPUTED by the calendar)."""
SECOND = 1_000_000


def from_text(
    folder: Path, text: str | bytes, timezone: str | None = None, tags: tuple[str, ...] = ("A",)
) -> History:
    file = folder / "history.csv"
    file.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
    return read_history(file, tags, timezone)


def refusal(
    folder: Path, text: str | bytes, timezone: str | None = None, tags: tuple[str, ...] = ("A",)
) -> list[str]:
    """What is said of a bad file, with the folder's name taken off."""
    with pytest.raises(HistoryFileError) as caught:
        from_text(folder, text, timezone, tags)
    return [line.removeprefix(f"{folder / 'history.csv'}: ") for line in caught.value.lines]


def same(one: TagSeries, other: TagSeries) -> bool:
    return (
        one.times.tobytes() == other.times.tobytes()
        and np.array_equal(one.values, other.values, equal_nan=True)
        and one.qualities.tobytes() == other.qualities.tobytes()
    )


def test_only_what_is_a_reading_becomes_one(tmp_path: Path) -> None:
    text = (
        "time,A,A.quality,note,B\n"
        "2026-01-01T00:00:00Z,1.5,,start,\n"
        "2026-01-01T00:00:10Z,,Good,,\n"
        "2026-01-01T00:00:20Z,,BAD,,\n"
        "2026-01-01T00:00:30Z,2.5,uncertain,,7\n"
        "2026-01-01T00:00:40Z,3.5,bad,,\n"
        "2026-01-01T00:00:50Z,,,,\n"
    )
    history = from_text(tmp_path, text, tags=("A", "B"))
    a, b = history.series["A"], history.series["B"]
    assert ((a.times - START) // SECOND).tolist() == [0, 20, 30, 40]
    np.testing.assert_array_equal(a.values, [1.5, np.nan, 2.5, 3.5])
    assert a.qualities.tolist() == [Quality.GOOD, Quality.BAD, Quality.UNCERTAIN, Quality.BAD]
    assert b.times.tolist() == [START + 30 * SECOND]
    assert b.values.tolist() == [7.0]
    # the history is as long as its rows, also where they are empty
    assert (history.first_time, history.last_time) == (START, START + 50 * SECOND)
    assert history.ignored_columns == ("note",)


@pytest.mark.parametrize(
    ("cell", "quality"),
    [
        ("Good", 0),
        ("UNCERTAIN", 1),
        ("bad", 2),
        ("0", 0),
        ("0x00000000", 0),
        ("0x40920000", 1),  # Uncertain_SubNormal-like: top bits 01
        ("1083310080", 1),  # the same number in decimal
        ("0x80050000", 2),  # Bad_CommunicationError: top bits 10
        ("2147483648", 2),
        ("0xC0000000", 2),  # top bits 11: reserved, not to be used
        ("0x00000480", 0),  # Good with overflow told in the information bits
        ("0x40000500", 1),  # Uncertain, limited low
    ],
)
def test_qualities_as_words_and_status_codes(tmp_path: Path, cell: str, quality: int) -> None:
    """OPC UA Part 4, StatusCode: bits 30-31 are 00 Good, 01 Uncertain, 10 Bad, 11 reserved (MEMORY)."""
    history = from_text(tmp_path, f"time,A,A.quality\n2026-01-01T00:00:00Z,1,{cell}\n")
    assert history.series["A"].qualities.tolist() == [quality]


@pytest.mark.parametrize("cell", ["fine", "192", "3", "-1", "4294967296", "1.5", "0x", "0xZZ", "True"])
def test_qualities_that_mean_nothing_are_refused(tmp_path: Path, cell: str) -> None:
    text = f"time,A,A.quality\n2026-01-01T00:00:00Z,1,Good\n2026-01-01T00:00:10Z,1,{cell}\n"
    said = refusal(tmp_path, text)
    assert said == [
        "row 2 (line 3), column A.quality: expected Good, Uncertain, Bad or an OPC UA status code such as "
        f"0x80000000, found {cell!r}"
    ]


@pytest.mark.parametrize(
    ("cell", "microseconds"),
    [
        ("2026-01-01T00:00:00Z", 0),
        ("2026-01-01T00:00:00+00:00", 0),
        ("2026-01-01 00:00:00Z", 0),
        ("2026-01-01T05:30:00+05:30", 0),
        ("2025-12-31T19:00:00-0500", 0),
        ("2026-01-01T01+01", 0),
        ("20260101T000000Z", 0),
        ("2026-01-01T00:00:00.5Z", 500_000),
        ("2026-01-01T00:00:00,5Z", 500_000),
        ("2026-01-01T00:00:00.123456Z", 123_456),
        ("2026-01-01T00:00:00.1234567Z", 123_456),
        ("2026-01-01T00:00:00.123456999Z", 123_456),
        ("1969-12-31T23:59:59.999999Z", -1 - START),
    ],
)
def test_times_with_an_offset(tmp_path: Path, cell: str, microseconds: int) -> None:
    history = from_text(tmp_path, f'time,A\n"{cell}",1\n')
    assert history.first_time == START + microseconds


def test_times_of_several_forms_in_one_file(tmp_path: Path) -> None:
    text = "time,A\n2026-01-01T00:00:00.1234567Z,1\n2026-01-01T01:00:10+01:00,2\n2026-01-01T01:00:20,3\n"
    history = from_text(tmp_path, text, timezone="Europe/Berlin")
    assert (history.series["A"].times - START).tolist() == [123_456, 10 * SECOND, 20 * SECOND]


def test_local_times_around_both_changes_of_the_clock(tmp_path: Path) -> None:
    """Europe/Berlin: +02:00 from 2026-03-29T01:00Z to 2026-10-25T01:00Z, else +01:00 (2000/84/EC; MEMORY)."""
    text = (
        "time,A\n2026-03-29T01:59:59,1\n2026-03-29T03:00:00,2\n2026-10-25T01:59:59,3\n2026-10-25T03:00:00,4\n"
    )
    times = from_text(tmp_path, text, timezone="Europe/Berlin").series["A"].times
    assert np.diff(times).tolist()[0] == SECOND
    assert np.diff(times).tolist()[2] == 7201 * SECOND


def test_a_time_that_occurs_twice_is_refused(tmp_path: Path) -> None:
    text = "time,A\n2026-10-25T01:59:59,1\n2026-10-25T02:00:00,2\n"
    assert refusal(tmp_path, text, "Europe/Berlin") == [
        "row 2 (line 3), column time: 2026-10-25T02:00:00 occurs twice in Europe/Berlin, "
        "where the clock was put back; write the offset"
    ]


def test_a_time_that_occurs_twice_is_taken_with_its_offset(tmp_path: Path) -> None:
    text = "time,A\n2026-10-25T02:30:00+02:00,1\n2026-10-25T02:30:00+01:00,2\n2026-10-25T03:30:00,3\n"
    times = from_text(tmp_path, text, "Europe/Berlin").series["A"].times
    assert np.diff(times).tolist() == [3600 * SECOND, 3600 * SECOND]


def test_a_time_that_never_was_is_refused(tmp_path: Path) -> None:
    text = "time,A\n2026-03-29T02:00:00,2\n"
    assert refusal(tmp_path, text, "Europe/Berlin") == [
        "row 1 (line 2), column time: 2026-03-29T02:00:00 does not exist in Europe/Berlin, "
        "where the clock was put forward"
    ]


def test_the_row_of_a_bad_local_time_is_right_among_times_with_offsets(tmp_path: Path) -> None:
    text = "time,A\n2026-03-29T00:00:00Z,1\n2026-03-29T02:00:00,2\n"
    said = refusal(tmp_path, text, "Europe/Berlin")
    assert said[0].startswith("row 2 (line 3), column time: 2026-03-29T02:00:00")


@pytest.mark.parametrize("name", ["Mars/Olympus", "Europe", "../etc/passwd", "", "+01:00"])
def test_time_zones_that_nobody_knows_are_refused(tmp_path: Path, name: str) -> None:
    said = refusal(tmp_path, "time,A\n2026-01-01T00:00:00Z,1\n", name)
    assert said == [f"no time zone is called {name!r}; expected a name such as Europe/Berlin"]


BAD_TIME = "expected a time such as 2026-01-31T14:00:00Z or 2026-01-31T15:00:00+01:00, found"
NO_OFFSET = "has no offset from UTC; write one, or name the time zone with --timezone"


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "is empty; expected a CSV or Parquet file"),
        ("\n\n", "is empty; expected a header line with column names"),
        ("time,A\n", "has no rows; expected at least one"),
        ("A,B\n1,2\n", "expected a column named 'time', found A, B"),
        (
            "time;A\n2026-01-01T00:00:00Z;1\n",
            "expected columns separated by commas, found the header 'time;A'",
        ),
        ("time,A\n2026-01-01T00:00:00,1\n", f"row 1 (line 2), column time: 2026-01-01T00:00:00 {NO_OFFSET}"),
        (
            "time,A\n2026-01-01T00:00:00.1234567Z,1\n2026-01-01T00:00:10,1\n",
            f"row 2 (line 3), column time: 2026-01-01T00:00:10 {NO_OFFSET}",
        ),
        ("time,A\nyesterday,1\n", f"row 1 (line 2), column time: {BAD_TIME} 'yesterday'"),
        ("time,A\n1767225600,1\n", f"row 1 (line 2), column time: {BAD_TIME} '1767225600'"),
        (
            "time,A\n2026-02-29T00:00:00Z,1\n",
            f"row 1 (line 2), column time: {BAD_TIME} '2026-02-29T00:00:00Z'",
        ),
        ("time,A\n,1\n", f"row 1 (line 2), column time: {BAD_TIME[:-7]}, found an empty cell"),
        (
            "time,A\n2026-01-01T00:00:10Z,1\n2026-01-01T00:00:00Z,2\n",
            "row 2 (line 3), column time: 2026-01-01T00:00:00Z is before 2026-01-01T00:00:10Z "
            "in row 1 (line 2); expected each time once, in increasing order",
        ),
        (
            "time,A\n2026-01-01T00:00:10Z,1\n2026-01-01T01:00:10+01:00,2\n",
            "row 2 (line 3), column time: 2026-01-01T00:00:10Z is the time of row 1 (line 2) too; "
            "expected each time once, in increasing order",
        ),
        (
            "time,A\n2026-01-01T00:00:00Z,1\n\n\n2026-01-01T00:00:10Z,off\n",
            "row 2 (line 5), column A: expected a number such as 92.4, found the text 'off'",
        ),
        (
            'time,A\n2026-01-01T00:00:00Z,"1,5"\n',
            "row 1 (line 2), column A: expected a number such as 92.4, found the text '1,5'",
        ),
        (
            "time,A\n2026-01-01T00:00:00Z,1_0\n",
            "row 1 (line 2), column A: expected a number such as 92.4, found the text '1_0'",
        ),
        (
            "time,A\n2026-01-01T00:00:00Z,inf\n",
            "row 1 (line 2), column A: expected a finite number, found inf",
        ),
        (
            "time,A\n2026-01-01T00:00:00Z,-1e999\n",
            "row 1 (line 2), column A: expected a finite number, found -inf",
        ),
        (
            "time,A,A\n2026-01-01T00:00:00Z,1,2\n",
            "column A: this name stands over more than one column; expected each name once",
        ),
        (
            "time,A\n2026-01-01T00:00:00Z,1\n2026-01-01T00:00:10Z\n",
            "row 2 (line 3): expected 2 cells as in the header, found 1",
        ),
        (
            "time,A\n2026-01-01T00:00:00Z,1,5\n",
            "row 1 (line 2): expected 2 cells as in the header, found 3",
        ),
        (
            "time,A,Größe\n2026-01-01T00:00:00Z,1,2\n".encode("latin-1"),
            "line 1: expected UTF-8 text, found the byte 0xf6",
        ),
        (
            "time,A,B\n2026-01-01T00:00:00Z,1,groß\n".encode("latin-1"),
            "line 2: expected UTF-8 text, found the byte 0xdf",
        ),
        (
            "time,A\n2026-01-01T00:00:00Z,1\n".encode("utf-16"),
            "line 1: expected UTF-8 text, found the byte 0xff",
        ),
    ],
)
def test_bad_text_files_are_refused(tmp_path: Path, text: str | bytes, said: str) -> None:
    assert refusal(tmp_path, text) == [said]


def test_every_tag_that_is_lacking_is_named(tmp_path: Path) -> None:
    text = "time,B\n2026-01-01T00:00:00Z,1\n"
    assert refusal(tmp_path, text, tags=("A", "B", "C")) == [
        "no column 'A', a tag that is needed",
        "no column 'C', a tag that is needed",
    ]


def test_a_quality_without_its_tag_is_no_column_of_it(tmp_path: Path) -> None:
    assert refusal(tmp_path, "time,A.quality\n2026-01-01T00:00:00Z,Good\n") == [
        "no column 'A', a tag that is needed"
    ]


@pytest.mark.parametrize("text", ["+1.5", " 1.5 ", '"1.5"', "1.5e0", "01.50"])
def test_numbers_as_people_write_them(tmp_path: Path, text: str) -> None:
    assert from_text(tmp_path, f"time,A\n2026-01-01T00:00:00Z,{text}\n").series["A"].values.tolist() == [1.5]


@pytest.mark.parametrize("text", ["", "nan", "NaN", '""'])
def test_cells_without_a_number(tmp_path: Path, text: str) -> None:
    assert len(from_text(tmp_path, f"time,A\n2026-01-01T00:00:00Z,{text}\n").series["A"]) == 0


def test_text_from_spreadsheets_is_read(tmp_path: Path) -> None:
    """A byte order mark, CR LF, a blank line at the end, a column without a name, other text elsewhere."""
    text = "\ufefftime,A,\r\n2026-01-01T00:00:00Z,1.5,größer\r\n\r\n"
    history = from_text(tmp_path, text)
    assert history.series["A"].values.tolist() == [1.5]
    assert history.ignored_columns == ("(column 3 without a name)",)


def test_numbers_are_read_to_the_last_bit(tmp_path: Path) -> None:
    values = np.random.default_rng(1).normal(size=2000) * 10.0 ** np.random.default_rng(2).integers(
        -300, 300, 2000
    )
    frame = pd.DataFrame(
        {"time": pd.date_range("2026-01-01", periods=2000, freq="10s", tz="UTC"), "A": values}
    )
    frame.to_csv(tmp_path / "history.csv", index=False, float_format="%.17g")
    history = read_history(tmp_path / "history.csv", ["A"])
    assert history.series["A"].values.tobytes() == values.tobytes()


def test_a_number_needs_text_elsewhere_to_be_read_alike(tmp_path: Path) -> None:
    """A plus sign sends a whole file through the slower reading; the numbers stay the same bits."""
    rows = "".join(f"2026-01-01T00:00:{second:02d}Z,{1 / (second + 3)!r}\n" for second in range(59))
    quick = from_text(tmp_path, f"time,A\n{rows}2026-01-01T00:00:59Z,0.5\n")
    slow = from_text(tmp_path, f"time,A\n{rows}2026-01-01T00:00:59Z, 0.5\n")
    assert same(quick.series["A"], slow.series["A"])


def test_what_is_no_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(HistoryFileError, match="is a folder; expected a CSV or Parquet file"):
        read_history(tmp_path, ["A"])
    with pytest.raises(HistoryFileError, match=r"absent\.csv: there is no such file"):
        read_history(tmp_path / "absent.csv", ["A"])


Resolution = Literal["s", "ms", "us", "ns"]
RESOLUTIONS: tuple[Resolution, ...] = ("s", "ms", "us", "ns")


def frame(**columns: object) -> pd.DataFrame:
    times = pd.date_range("2026-01-01", periods=3, freq="10s", tz="UTC")
    return pd.DataFrame({"time": times, "A": [1.0, float("nan"), 3.0]} | columns)


def test_frames_and_parquet_files_and_csv_files_are_read_alike(tmp_path: Path) -> None:
    recorded = frame(**{"A.quality": ["Good", "Bad", "Uncertain"], "TI1.other": [1, 2, 3]})
    recorded.to_parquet(tmp_path / "history.parquet")
    recorded.to_csv(tmp_path / "history.csv", index=False)
    histories = [
        history_from_frame(recorded, ["A"]),
        read_history(tmp_path / "history.parquet", ["A"]),
        read_history(tmp_path / "history.csv", ["A"]),
    ]
    for history in histories:
        assert ((history.series["A"].times - START) // SECOND).tolist() == [0, 10, 20]
        assert history.series["A"].qualities.tolist() == [0, 2, 1]
        assert same(history.series["A"], histories[0].series["A"])
        assert history.ignored_columns == ("TI1.other",)


@pytest.mark.parametrize("resolution", RESOLUTIONS)
@pytest.mark.parametrize("zone", ["UTC", "Asia/Kolkata"])
def test_timestamps_of_every_resolution(tmp_path: Path, resolution: Resolution, zone: str) -> None:
    times = pd.date_range("2026-01-01", periods=3, freq="10s", tz="UTC").tz_convert(zone).as_unit(resolution)
    recorded = frame(time=times)
    recorded.to_parquet(tmp_path / "history.parquet")
    for history in (history_from_frame(recorded, ["A"]), read_history(tmp_path / "history.parquet", ["A"])):
        assert history.series["A"].times.tolist() == [START, START + 20 * SECOND]


@pytest.mark.parametrize("resolution", RESOLUTIONS)
def test_timestamps_without_a_zone(tmp_path: Path, resolution: Resolution) -> None:
    recorded = frame(time=pd.date_range("2026-01-01 01:00", periods=3, freq="10s").as_unit(resolution))
    assert history_from_frame(recorded, ["A"], "Europe/Berlin").first_time == START
    with pytest.raises(
        HistoryFileError, match=f"history: row 1, column time: 2026-01-01T01:00:00 {NO_OFFSET}"
    ):
        history_from_frame(recorded, ["A"])
    recorded.to_parquet(tmp_path / "history.parquet")
    with pytest.raises(HistoryFileError, match="row 1, column time: 2026-01-01T01:00:00 has no offset"):
        read_history(tmp_path / "history.parquet", ["A"])


def test_nanoseconds_are_cut_to_microseconds() -> None:
    times = pd.DatetimeIndex(np.array([-1, 1_999, 2_000], dtype="datetime64[ns]")).tz_localize("UTC")
    history = history_from_frame(frame(time=times, A=[1.0, 2.0, 3.0]), ["A"])
    assert history.series["A"].times.tolist() == [-1, 1, 2]


@pytest.mark.parametrize(
    "times",
    [
        ["2026-01-01T00:00:00Z", "2026-01-01T01:00:10+01:00", "2026-01-01T00:00:20.000000Z"],
        [
            pd.Timestamp("2026-01-01", tz="UTC"),
            pd.Timestamp("2026-01-01T01:00:10+01:00"),
            "2026-01-01T00:00:20Z",
        ],
    ],
)
def test_times_in_frames_as_text_and_objects(times: list[object]) -> None:
    history = history_from_frame(frame(time=pd.Series(times, dtype=object)), ["A"])
    assert history.series["A"].times.tolist() == [START, START + 20 * SECOND]


def test_a_naive_time_among_others_in_a_frame_is_refused() -> None:
    times = pd.Series(
        [pd.Timestamp("2026-01-01", tz="UTC"), pd.Timestamp("2026-01-01T00:00:10"), "x"], dtype=object
    )
    with pytest.raises(HistoryFileError, match=r"history: row 3, column time: expected a time .* found 'x'"):
        history_from_frame(frame(time=times), ["A"])
    with pytest.raises(HistoryFileError, match="row 2, column time: 2026-01-01T00:00:10 has no offset"):
        history_from_frame(frame(time=times).iloc[:2], ["A"])


@pytest.mark.parametrize(
    "values",
    [
        [1, 2, 3],
        pd.array([1, None, 3], dtype="Int64"),
        pd.array([1.0, None, 3.0], dtype="Float64"),
        pd.array([1.0, None, 3.0], dtype="double[pyarrow]"),
        np.array([1, 2, 3], dtype=np.float32),
        pd.Series([1, None, 3.0], dtype=object),
    ],
)
def test_numbers_of_every_kind_in_frames(values: object) -> None:
    series = history_from_frame(frame(A=values), ["A"]).series["A"]
    assert series.values[[0, -1]].tolist() == [1.0, 3.0]
    assert series.values.dtype == np.float64


@pytest.mark.parametrize(
    ("values", "said"),
    [
        (["1", "2", "3"], "history: row 1, column A: expected a number such as 92.4, found the text '1'"),
        (
            pd.Series([1.0, "off", 3.0], dtype=object),
            "history: row 2, column A: expected numbers or text, found both; here the text 'off'",
        ),
        ([1.0, float("inf"), 3.0], "history: row 2, column A: expected a finite number, found inf"),
        ([True, False, True], "history: column A: expected numbers, found a column of bool"),
        ([1j, 2j, 3j], "history: column A: cannot be read: Unsupported numpy type 15"),
        (
            pd.Series([[1], [2], [3]], dtype=object),
            "history: column A: expected numbers, found a column of list",
        ),
    ],
)
def test_columns_in_frames_that_are_no_numbers(values: object, said: str) -> None:
    with pytest.raises(HistoryFileError) as caught:
        history_from_frame(frame(A=values), ["A"])
    assert str(caught.value).startswith(said)


def test_status_codes_in_frames_as_numbers() -> None:
    for codes in (
        np.array([0, 0x80050000, 0x40000000], dtype=np.uint32),
        pd.Series([0.0, 2147483648.0, 1073741824.0]),
        pd.Categorical(["Good", "Bad", "Uncertain"]),
    ):
        history = history_from_frame(frame(**{"A.quality": codes}), ["A"])
        assert history.series["A"].qualities.tolist() == [0, 2, 1]


def test_other_bad_frames() -> None:
    with pytest.raises(HistoryFileError, match="history: has no rows"):
        history_from_frame(frame().iloc[:0], ["A"])
    with pytest.raises(HistoryFileError, match="history: expected a column named 'time', found A"):
        history_from_frame(frame().drop(columns="time"), ["A"])
    with pytest.raises(HistoryFileError, match="export of May: no column 'B'"):
        history_from_frame(frame(), ["B"], name="export of May")
    with pytest.raises(HistoryFileError, match=r"column time: expected a time .* found a column of int64"):
        history_from_frame(frame(time=[1, 2, 3]), ["A"])
    times = frame()["time"].mask(np.array([False, True, False]))
    with pytest.raises(HistoryFileError, match=r"row 2, column time: expected a time .* found an empty cell"):
        history_from_frame(frame(time=times), ["A"])
    twice = frame(B=[1.0, 2.0, 3.0])
    twice.columns = pd.Index(["time", "A", "A"])
    with pytest.raises(
        HistoryFileError, match="history: column A: this name stands over more than one column"
    ):
        history_from_frame(twice, ["A"])


def test_a_column_without_any_value_has_no_readings(tmp_path: Path) -> None:
    empty = frame(A=pd.Series([None, None, None], dtype=object))
    empty.to_parquet(tmp_path / "history.parquet")
    assert len(history_from_frame(empty, ["A"]).series["A"]) == 0
    assert len(read_history(tmp_path / "history.parquet", ["A"]).series["A"]) == 0


@pytest.mark.parametrize("share", [0.0, 0.01, 0.3, 0.7, 0.99])
def test_truncated_parquet_files_are_refused(tmp_path: Path, share: float) -> None:
    file = tmp_path / "history.parquet"
    frame().to_parquet(file)
    whole = file.read_bytes()
    file.write_bytes(whole[: int(len(whole) * share)])
    with pytest.raises(
        HistoryFileError, match=r"history\.parquet: is (empty|not a whole Parquet file, truncated)"
    ):
        read_history(file, ["A"])


def test_damaged_parquet_files_are_refused(tmp_path: Path) -> None:
    file = tmp_path / "history.parquet"
    frame().to_parquet(file, compression="snappy")
    whole = file.read_bytes()
    file.write_bytes(whole[:8] + bytes(72) + whole[80:])
    with pytest.raises(
        HistoryFileError, match=r"history\.parquet: is not a whole Parquet file, truncated or damaged"
    ):
        read_history(file, ["A"])


def test_parquet_is_known_by_its_content_too(tmp_path: Path) -> None:
    frame().to_parquet(tmp_path / "history.parquet")
    renamed = (tmp_path / "history.parquet").rename(tmp_path / "history.dat")
    assert read_history(renamed, ["A"]).first_time == START


def test_parquet_with_time_as_its_index_is_read(tmp_path: Path) -> None:
    frame().set_index("time").to_parquet(tmp_path / "history.parquet")
    assert read_history(tmp_path / "history.parquet", ["A"]).first_time == START
