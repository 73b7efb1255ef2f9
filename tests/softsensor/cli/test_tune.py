"""``softsensor tune`` on a plant whose noise is known: what it writes, what it refuses, its exit statuses."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from independent.recorded_runs import lab_frame, record

from plant_models.model_file import parse_model_text, read_model_file
from plant_models.specification import UnitSpec

CYCLES = 2500
FILE = """# An invented column.
[unit]
name = "C-1"
title = "A column"
sample_time = "1 min"

[[input]]
tag = "FI1"
unit = "kg/h"
operating_point = 10.0
range = [0.0, 20.0]

[[sensor]]
tag = "TI1"                   # the tray
unit = "degC"
operating_point = 80.0
range = [0.0, 200.0]
noise_sd = 0.1                # a guess
tolerance = 1.0

[[estimate]]
tag = "AY1"
unit = "mol%"
operating_point = 5.0
range = [-100.0, 100.0]
lab = { tag = "AL1", sd = 0.1 }

[[disturbance]]
name = "feed"
sd = 1.0                      # a guess, too
time_constant = "30 min"

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = 2.0
time_constants = ["5 min"]

[[transfer_function]]
from = "feed"
to = "TI1"
gain = 1.0
time_constants = ["4 min"]

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.8
time_constants = ["6 min"]
"""
SECOND = """
[[disturbance]]
name = "steam"
sd = 0.5
time_constant = "30 min"

[[transfer_function]]
from = "steam"
to = "TI1"
gain = -2.0
time_constants = ["4 min"]
"""


def truth(spec: UnitSpec) -> UnitSpec:
    return replace(
        spec,
        sensors=(replace(spec.sensors[0], noise_sd=0.2),),
        disturbances=(replace(spec.disturbances[0], sd=0.5, time_constant=3000.0),),
    )


@pytest.fixture(scope="module")
def plant(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the model file, a history and laboratory results of a plant with other noise."""
    folder = tmp_path_factory.mktemp("plant")
    (folder / "model.toml").write_text(FILE, encoding="utf-8")
    spec = truth(read_model_file(folder / "model.toml"))
    run = record(spec, CYCLES, 11, gaps=0.02, move=0.5)
    run.history().to_csv(folder / "history.csv", index=False)
    rng = np.random.default_rng(5)
    rows = [
        (
            float(k),
            float(k + 10),
            "AL1",
            float(run.truth[k, 1] + 0.1 * rng.standard_normal() + 0.8 * np.sin(k)),
        )
        for k in range(20, CYCLES - 20, 15)
    ]
    lab_frame(spec, rows).to_csv(folder / "lab.csv", index=False)
    return folder


@pytest.fixture
def out(tmp_path: Path) -> Path:
    return tmp_path / "tuned.toml"


def test_known_noise_is_found_and_written_with_the_comments_kept(
    command: Any, plant: Path, out: Path
) -> None:
    said = command("tune", plant / "model.toml", plant / "history.csv", "--out", out, "--json")
    document = json.loads(said.out)

    assert (said.status, said.err, document["accepted"], document["refusals"]) == (0, "", True, [])
    true = {"TI1.noise_sd": 0.2, "feed.sd": 0.5, "feed.time_constant": 3000.0}
    for number in document["numbers"]:
        assert number["low"] <= true[number["name"]] <= number["high"]
    (sensor,) = document["sensors"]
    assert sensor["nis_before"] > 1.5
    assert 0.85 < sensor["nis_after"] < 1.15
    assert abs(sensor["whiteness_after"]) < 2.0 * sensor["bound"]
    assert document["log_likelihood_judged"][1] > document["log_likelihood_judged"][0]
    written = out.read_text(encoding="utf-8")
    kept = [line for line in FILE.splitlines() if "noise_sd" not in line and "sd = 1.0" not in line]
    assert [line for line in written.splitlines() if line in kept] == [
        line for line in kept if line != 'time_constant = "30 min"'
    ]
    assert written.count("# a guess") == 2
    values = {number["name"]: number["written"] for number in document["numbers"]}
    spec = parse_model_text(written, "tuned")
    assert spec.sensors[0].noise_sd == values["TI1.noise_sd"]
    assert spec.disturbances[0].time_constant == values["feed.time_constant"]
    assert spec.sensors[0].tolerance == 1.0


@pytest.mark.parametrize("guess", ["0.1 ", "0.02"])
def test_impossible_readings_are_not_fitted_also_from_noise_that_is_far_too_small(
    command: Any, plant: Path, out: Path, guess: str
) -> None:
    """With the file's noise ten times too small the gate cuts off many true readings, until the fit has grown."""
    model, history = out.parent / "model.toml", out.parent / "history.csv"
    assert FILE.count("noise_sd = 0.1 ") == 1
    model.write_text(FILE.replace("noise_sd = 0.1 ", f"noise_sd = {guess}"), encoding="utf-8")
    frame = pd.read_csv(plant / "history.csv")
    frame.loc[np.random.default_rng(3).choice(len(frame), 40, replace=False), "TI1"] += 30.0
    frame.to_csv(history, index=False)
    said = command("tune", model, history, "--out", out, "--json")
    document = json.loads(said.out)

    assert (said.status, document["refusals"]) == (0, [])
    true = {"TI1.noise_sd": 0.2, "feed.sd": 0.5, "feed.time_constant": 3000.0}
    for number in document["numbers"]:
        assert number["low"] <= true[number["name"]] <= number["high"]


def test_an_interval_that_laboratory_results_contradict_is_scaled(
    command: Any, plant: Path, out: Path
) -> None:
    said = command(
        "tune",
        plant / "model.toml",
        plant / "history.csv",
        "--lab",
        plant / "lab.csv",
        "--out",
        out,
        "--json",
    )
    document = json.loads(said.out)
    (interval,) = document["intervals"]

    assert said.status == 0
    assert interval["coverage_high"] < 0.95
    assert interval["scale"] > 1.2
    assert interval["coverage_scaled"] >= 0.93
    assert "split conformal" in interval["reason"]
    assert (
        parse_model_text(out.read_text(encoding="utf-8"), "t").estimates[0].interval_scale
        == interval["scale"]
    )


def test_only_the_interval_is_changed_where_that_is_asked_for(command: Any, plant: Path, out: Path) -> None:
    """The readings cannot tell two disturbances apart, which a factor on the interval does not need."""
    model = out.parent / "two.toml"
    model.write_text(FILE + SECOND, encoding="utf-8")
    arguments = ("tune", model, plant / "history.csv", "--lab", plant / "lab.csv", "--out", out, "--json")
    assert command(*arguments).status == 1

    said = command(*arguments, "--interval-only")

    (interval,) = json.loads(said.out)["intervals"]
    before, after = (parse_model_text(path.read_text(encoding="utf-8"), "t") for path in (model, out))
    assert (said.status, json.loads(said.out)["numbers"]) == (0, [])
    assert interval["scale"] != 1.0
    estimate = replace(before.estimates[0], interval_scale=interval["scale"])
    assert replace(after, source_text="") == replace(before, estimates=(estimate,), source_text="")


def test_the_report_in_words(command: Any, plant: Path, out: Path) -> None:
    said = command("tune", plant / "model.toml", plant / "history.csv", "--out", out)

    assert said.status == 0
    for piece in ("TI1.noise_sd: 0.", "95 % interval", "nis", "interval_scale 1 unchanged", "Advisory only"):
        assert piece in said.out


def refused(outcome: Any, out: Path, *expected: str) -> None:
    assert (outcome.status, outcome.err) == (1, "")
    for piece in expected:
        assert piece in outcome.out
    assert "REFUSED" in outcome.out
    assert not out.exists()


def spoilt(plant: Path, out: Path, change: Any) -> Path:
    frame = pd.read_csv(plant / "history.csv")
    change(frame)
    frame.to_csv(out.parent / "spoilt.csv", index=False)
    return out.parent / "spoilt.csv"


def test_a_compressed_archive_is_refused(command: Any, plant: Path, out: Path) -> None:
    def compress(frame: pd.DataFrame) -> None:
        frame.loc[np.arange(len(frame)) % 5 != 0, "TI1"] = np.nan
        frame["TI1"] = frame["TI1"].interpolate()

    history = spoilt(plant, out, compress)
    refused(command("tune", plant / "model.toml", history, "--out", out), out, "TI1: ", "straight line")


def test_a_filtered_archive_is_refused(command: Any, plant: Path, out: Path) -> None:
    def smooth(frame: pd.DataFrame) -> None:
        frame["TI1"] = frame["TI1"].ewm(alpha=0.5, ignore_na=True).mean()

    history = spoilt(plant, out, smooth)
    refused(
        command("tune", plant / "model.toml", history, "--out", out), out, "TI1: ", "filtered or averaged"
    )


def test_readings_reported_on_change_are_refused(command: Any, plant: Path, out: Path) -> None:
    model = out.parent / "m.toml"
    model.write_text(FILE.replace("tolerance = 1.0", "tolerance = 1.0\non_change = true"), encoding="utf-8")

    refused(command("tune", model, plant / "history.csv", "--out", out), out, "TI1: it is reported on change")


def test_disturbances_that_look_alike_are_refused_by_name(command: Any, plant: Path, out: Path) -> None:
    model = out.parent / "m.toml"
    model.write_text(FILE + SECOND, encoding="utf-8")

    refused(command("tune", model, plant / "history.csv", "--out", out), out, "feed and steam", "--keep NAME")


def test_a_number_that_is_kept_is_not_fitted(command: Any, plant: Path, out: Path) -> None:
    said = command(
        "tune",
        plant / "model.toml",
        plant / "history.csv",
        "--out",
        out,
        "--json",
        "--keep",
        "feed.time_constant",
    )

    assert said.status == 0
    assert [item["name"] for item in json.loads(said.out)["numbers"]] == ["TI1.noise_sd", "feed.sd"]
    assert 'time_constant = "30 min"' in out.read_text(encoding="utf-8")


def test_a_history_whose_parts_differ_is_refused(command: Any, plant: Path, out: Path) -> None:
    model = out.parent / "m.toml"
    model.write_text(FILE.replace("noise_sd = 0.1 ", "noise_sd = 0.2 "), encoding="utf-8")

    def noisier(frame: pd.DataFrame) -> None:
        early = frame.index < 0.6 * len(frame)
        frame.loc[early, "TI1"] += 0.4 * np.random.default_rng(1).standard_normal(int(early.sum()))

    history = spoilt(plant, out, noisier)
    refused(
        command("tune", model, history, "--out", out),
        out,
        "the two parts of the history differ",
    )


def test_a_short_history_is_refused(command: Any, plant: Path, out: Path) -> None:
    history = out.parent / "short.csv"
    pd.read_csv(plant / "history.csv")[:600].to_csv(history, index=False)

    refused(command("tune", plant / "model.toml", history, "--out", out), out, "at least 500 in either part")


@pytest.mark.parametrize(
    "case", ["own file", "unknown name", "no folder", "no history", "nothing to look at"]
)
def test_bad_arguments_end_with_2(command: Any, plant: Path, out: Path, case: str) -> None:
    model, history = plant / "model.toml", plant / "history.csv"
    arguments, expected = {
        "own file": ((model, history, "--out", model), "expected another name"),
        "unknown name": ((model, history, "--out", out, "--keep", "feed.walk_sd"), "feed.time_constant"),
        "no folder": ((model, history, "--out", out.parent / "none" / "t.toml"), "--out"),
        "no history": ((model, plant / "none.csv", "--out", out), "none.csv"),
        "nothing to look at": ((model, history, "--out", out, "--interval-only"), "expected --lab with it"),
    }[case]
    said = command("tune", *arguments)

    assert said.status == 2
    assert expected in said.err
    assert "Traceback" not in said.err
    assert model.read_text(encoding="utf-8") == FILE
