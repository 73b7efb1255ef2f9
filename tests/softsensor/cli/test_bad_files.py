"""Files that cannot be used: exit status 2, where and what was expected on standard error, nothing on standard output."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd
import pytest


def refused(outcome: Any, *expected: str) -> None:
    """Status 2; every expected piece in some line of standard error; nothing else."""
    assert outcome.status == 2
    assert outcome.out == ""
    assert "Traceback" not in outcome.err
    assert outcome.lines
    for piece in expected:
        assert any(piece in line for line in outcome.lines), (piece, outcome.err)


def replayed(command: Any, files: Any, *more: str | Path) -> Any:
    return command("replay", files.model, *more, "--out", files.out, "--json")


def test_files_in_order_replay(command: Any, files: Any) -> None:
    outcome = replayed(command, files, files.history, "--lab", files.lab)
    assert (outcome.status, outcome.err) == (0, "")
    summary = json.loads(outcome.out)
    assert (summary["cycles"], summary["estimates"]["AY1"]["lab_count"]) == (30, 1)
    assert {path.name for path in files.out.iterdir()} == {
        "estimates.csv",
        "innovations.csv",
        "conformance.csv",
        "flags.csv",
        "hypotheses.csv",
        "lab_results.csv",
        "summary.json",
    }


def test_laboratory_results_of_other_tags_are_named(command: Any, files: Any) -> None:
    text = (
        "sampled_at,reported_at,tag,value,analyst\n"
        "2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL1,1.33,B\n"
        "2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL7,1.33,B\n"
        "2026-12-01T00:02:00Z,2026-12-01T00:03:00Z,AL8,1.33,B\n"
    )
    arguments = (
        "replay",
        files.model,
        files.history,
        "--lab",
        files.put("more.csv", text),
        "--out",
        files.out,
    )
    said = command(*arguments)
    assert said.status == 0
    for notes in (said.out, "\n".join(json.loads(command(*arguments, "--json").out)["notes"])):
        assert "more.csv: tags that the model does not know: AL7, AL8" in notes
        assert "more.csv: columns that the model does not know: analyst" in notes


MODEL_FAULTS = [
    ("range = [0.0, 20.0]", "", "12", "range: missing; expected"),
    ('unit = "degC"', 'unit = "degX"', "18", "unit:"),
    ("gain = -1.9", "gain = nan", "40", "gain: expected a finite number"),
    ('"8 min"', '"-8 min"', "47", "time_constants:"),
    ('dead_time = "0.55 min"', 'dead_time = "0.55"', "42", "dead_time:"),
    ('to = "AY1"', 'to = "AY9"', "51", "to:"),
]


def test_every_fault_of_a_model_file_at_once(command: Any, files: Any) -> None:
    text = files.model.read_text()
    for good, bad, _, _ in MODEL_FAULTS:
        assert text.count(good) >= 1
        text = text.replace(good, bad, 1)
    path = files.put("bad.toml", text)
    for arguments in (
        ("check", path, "--json"),
        ("replay", path, files.history, "--out", files.out, "--json"),
    ):
        outcome = command(*arguments)
        refused(outcome, *(key for _, _, _, key in MODEL_FAULTS))
        assert all(line.startswith(f"{path}:") for line in outcome.lines)
        numbers = [int(line.removeprefix(f"{path}:").split(":")[0]) for line in outcome.lines]
        assert numbers == sorted(numbers)
    assert not files.out.exists()


@pytest.mark.parametrize(
    ("name", "content", "expected"),
    [
        ("broken.toml", "[unit\nname = 1", "broken.toml:1"),
        ("empty.toml", "", "unit: missing"),
        ("binary.toml", b"\xff\xfe\x00\x01" * 20, "binary.toml:1"),
        ("twice.toml", "[unit]\nname = 'a'\nname = 'b'\n", "twice.toml:3"),
    ],
)
def test_what_is_no_model_file(command: Any, files: Any, name: str, content: Any, expected: str) -> None:
    refused(command("check", files.put(name, content), "--json"), expected)


def test_a_model_that_is_not_there_or_is_a_folder(command: Any, files: Any) -> None:
    refused(command("check", files.folder / "none.toml"), "none.toml")
    refused(command("check", files.folder), str(files.folder))


ROW = "2026-12-01T00:00:00Z,11.5,92.4\n"
HISTORIES = [
    ("naive time", "time,FI1,TI1\n2026-12-01T00:00:00,11.5,92.4\n", ("row 1", "time", "--timezone")),
    ("same time twice", f"time,FI1,TI1\n{ROW}{ROW}", ("row 2", "time", "increasing order")),
    (
        "times out of order",
        f"time,FI1,TI1\n2026-12-01T00:00:10Z,11.5,92.4\n{ROW}",
        ("row 2", "time", "is before", "increasing order"),
    ),
    ("text in a column of numbers", "time,FI1,TI1\n2026-12-01T00:00:00Z,11.5,n/a\n", ("row 1", "TI1", "n/a")),
    ("no such column", "time,FI1\n2026-12-01T00:00:00Z,11.5\n", ("no column 'TI1'", "is needed")),
    ("no time column", "when,FI1,TI1\n1,2,3\n", ("expected a column named 'time'",)),
    ("infinite", "time,FI1,TI1\n2026-12-01T00:00:00Z,inf,92.4\n", ("row 1", "FI1", "inf")),
    ("no rows", "time,FI1,TI1\n", ("no rows",)),
    ("empty", "", ("history.csv",)),
    ("not text", b"\x00\x01\x02\xff" * 50, ("history.csv",)),
    ("time that is none", "time,FI1,TI1\nnoon,11.5,92.4\n", ("row 1", "time", "noon")),
    ("Parquet in name only", None, ("history.parquet",)),
    ("Parquet cut short", None, ("history.parquet",)),
]


@pytest.mark.parametrize(("case", "content", "expected"), HISTORIES, ids=[item[0] for item in HISTORIES])
def test_histories_that_cannot_be_used(
    command: Any, files: Any, case: str, content: Any, expected: tuple[str, ...]
) -> None:
    name = "history.csv"
    if content is None:
        name = "history.parquet"
        whole = files.folder / "whole.parquet"
        times = pd.date_range("2026-12-01", periods=50, freq="10s", tz="UTC")
        pd.DataFrame({"time": times, "FI1": 11.5, "TI1": 92.4}).to_parquet(whole)
        content = whole.read_bytes()[:-200] if case.endswith("short") else b"time,FI1,TI1\n"
    path = files.put(name, content)
    outcome = replayed(command, files, path)
    refused(outcome, *expected)
    assert all(line.startswith(str(path)) for line in outcome.lines)
    assert not (files.out / "summary.json").exists()


def test_a_column_that_the_model_does_not_know_is_named_once(command: Any, files: Any) -> None:
    text = files.history.read_text().replace("TI1\n", "TI1,XI9\n", 1)
    path = files.put(
        "more.csv", "".join(f"{line},7\n" if k else f"{line}\n" for k, line in enumerate(text.splitlines()))
    )
    outcome = replayed(command, files, path)
    assert (outcome.status, outcome.err) == (0, "")
    assert [note for note in json.loads(outcome.out)["notes"] if "XI9" in note] == [
        "columns that the model does not know: XI9"
    ]
    told = command("replay", files.model, path, "--out", files.out)
    assert (told.status, told.out.count("XI9")) == (0, 1)


LABS = [
    (
        "report before sampling",
        "2026-12-01T00:03:00Z,2026-12-01T00:01:00Z,AL1,1.3",
        ("row 1", "reported_at", "before"),
    ),
    (
        "the same twice",
        "2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL1,1.3\n2026-12-01T00:01:00Z,2026-12-01T00:04:00Z,AL1,1.3",
        ("row 2", "same result", "row 1"),
    ),
    ("no value", "2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL1,", ("row 1", "value")),
    ("infinite", "2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL1,inf", ("row 1", "value")),
    ("text", "2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL1,high", ("row 1", "value", "high")),
    ("naive time", "2026-12-01T00:01:00,2026-12-01T00:03:00Z,AL1,1.3", ("row 1", "sampled_at")),
]


@pytest.mark.parametrize(("case", "rows", "expected"), LABS, ids=[item[0] for item in LABS])
def test_laboratory_results_that_cannot_be_used(
    command: Any, files: Any, case: str, rows: str, expected: tuple[str, ...]
) -> None:
    path = files.put("lab.csv", f"sampled_at,reported_at,tag,value\n{rows}\n")
    outcome = replayed(command, files, files.history, "--lab", path)
    refused(outcome, *expected)
    assert all(line.startswith(str(path)) for line in outcome.lines)


def test_laboratory_results_of_other_times_are_left_out_and_named(command: Any, files: Any) -> None:
    rows = (
        "2027-01-01T00:00:00Z,2027-01-01T01:00:00Z,AL1,1.3\n"
        "2026-11-30T00:00:00Z,2026-12-01T00:02:00Z,AL1,1.3\n"
        "2026-12-01T00:01:00Z,2026-12-02T00:00:00Z,AL1,1.3\n"
    )
    path = files.put("lab.csv", f"sampled_at,reported_at,tag,value\n{rows}")
    outcome = replayed(command, files, files.history, "--lab", path)
    assert (outcome.status, outcome.err) == (0, "")
    summary = json.loads(outcome.out)
    assert summary["estimates"]["AY1"]["lab_count"] == 0
    pieces = (
        "row 1, AL1: left out, sampled at 2027",
        "row 2, AL1: left out, sampled at 2026-11-30",
        "row 3, AL1: left out, reported at",
    )
    for piece in pieces:
        assert sum(piece in note for note in summary["notes"]) == 1


@pytest.mark.parametrize("name", ["none.csv", "none.parquet"])
def test_files_that_are_not_there(command: Any, files: Any, name: str) -> None:
    refused(replayed(command, files, files.folder / name), name)
    refused(replayed(command, files, files.history, "--lab", files.folder / name), name)
    refused(replayed(command, files, files.folder), str(files.folder))


def test_a_time_zone_that_is_none(command: Any, files: Any) -> None:
    refused(replayed(command, files, files.history, "--timezone", "Europe/Atlantis"), "Europe/Atlantis")


def test_laboratory_results_beside_a_database(command: Any, files: Any) -> None:
    refused(replayed(command, files, "sqlite:///none.db", "--lab", files.lab), "does not exist")
