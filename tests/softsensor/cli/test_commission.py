"""softsensor commission: innovations measured, intervals widened, the file written, the promise beside what was found."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from independent.recorded_runs import Run, record

from plant_models.building import build_plant_model
from plant_models.model_file import read_model_file
from plant_models.specification import UnitSpec
from softsensor.service.fault_test_settings import with_fault_tests
from softsensor.unit_design import design_unit

MODEL = """
[unit]
name = "C-1"
sample_time = "60 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 10.0
range = [0.0, 20.0]
validated_range = [9.0, 11.0]

[[sensor]]                # two thermometers
tag = "TI1"
unit = "degC"
operating_point = 50.0
range = [-1000.0, 1000.0]
noise_sd = 0.2
tolerance = 0.8

[[sensor]]
tag = "TI2"
unit = "degC"
operating_point = 60.0
range = [-1000.0, 1000.0]
noise_sd = 0.2
tolerance = 0.8

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.0
range = [-100.0, 100.0]

[[disturbance]]
name = "feed"
sd = 0.5
time_constant = "1 h"

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = 1.0
time_constants = ["5 min"]

[[transfer_function]]
from = "feed"
to = "TI1"
gain = 1.0
time_constants = ["5 min"]

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.5
time_constants = ["5 min"]

[[transfer_function]]
from = "FI1"
to = "TI2"
gain = 0.5
time_constants = ["5 min"]

[fault_tests]
false_flag_interval = "2 d"   # for the test
"""
CYCLES = 6000


def history(tmp_path: Path, spec: UnitSpec, noise: Any = None) -> Path:
    """A run of the model with steady inputs; ``noise`` (CYCLES,) is added to TI2."""
    run = record(spec, CYCLES, 3, move=0.0)
    quiet = np.where(run.uncertain, run.truth[:, :2] + (run.y - run.truth[:, :2]) / 3.0, run.y)
    if noise is not None:
        quiet[:, 1] += noise
    run = Run(spec, run.u, quiet, np.zeros_like(run.uncertain), run.truth)
    path = tmp_path / "history.parquet"
    run.history().to_parquet(path)
    return path


@pytest.fixture
def model(tmp_path: Path) -> Path:
    """A model file of two sensors."""
    path = tmp_path / "c1.toml"
    path.write_text(MODEL, encoding="utf-8")
    return path


def wandering(rho: float, sd: float) -> Any:
    noise = np.random.default_rng(4).standard_normal(CYCLES) * sd * np.sqrt(1.0 - rho**2)
    out = np.zeros(CYCLES)
    for k in range(1, CYCLES):
        out[k] = rho * out[k - 1] + noise[k]
    return out


def test_a_sound_model_is_written_as_it_is(command: Any, model: Path, tmp_path: Path) -> None:
    out = tmp_path / "out.toml"
    done = command("commission", model, history(tmp_path, read_model_file(model)), "--out", out)
    assert (done.status, done.err) == (0, "")
    assert "promised: one false flag per 2 d and sensor" in done.out
    assert "TI1: " in done.out
    assert done.out.count("nothing is widened") + done.out.count("widened 1.0") == 2
    if "widened 1.0" not in done.out:
        assert out.read_text(encoding="utf-8") == MODEL


def test_correlated_innovations_widen_that_sensors_intervals_and_the_file_says_so(
    command: Any, model: Path, tmp_path: Path
) -> None:
    out = tmp_path / "out.toml"
    data = history(tmp_path, read_model_file(model), wandering(0.5, 0.1))
    done = command("commission", model, data, "--out", out, "--json")
    assert (done.status, done.err) == (0, "")
    document = json.loads(done.out)
    sensor = document["sensors"][1]
    assert sensor["tag"] == "TI2"
    assert sensor["lag_one"] > 0.05
    assert sensor["before"] < 0.5 * document["promised"] == 86400.0
    assert sensor["after"] >= document["promised"]
    assert sensor["factor"] > 1.05
    spec = read_model_file(out)
    assert dict(spec.widening)["TI2"] == sensor["factor"]
    before, after = (
        design_unit(build_plant_model(s)).detection.tests.interval for s in (replace(spec, widening=()), spec)
    )
    assert after[1] == pytest.approx(before[1] * sensor["factor"], rel=1e-3)
    assert "# two thermometers" in out.read_text(encoding="utf-8")


def test_tests_that_cannot_keep_the_promise_stay_disarmed_with_the_reason(
    command: Any, model: Path, tmp_path: Path
) -> None:
    out = tmp_path / "out.toml"
    data = history(tmp_path, read_model_file(model), wandering(0.95, 0.5))
    done = command("commission", model, data, "--out", out)
    assert done.status == 1
    spec = read_model_file(out)
    ((tag, reason),) = spec.disarmed
    assert tag == "TI2"
    assert "at lag one over 4." in reason
    assert f"DISARMED: {reason}" in done.out
    assert design_unit(build_plant_model(spec)).detection.tests.armed.tolist() == [1, 0]
    checked = command("check", out)
    assert f"TI2: its tests of innovations are disarmed: {reason}" in " ".join(checked.out.split())
    replayed = command("replay", out, data, "--out", tmp_path / "r", "--json")
    sensors = json.loads(replayed.out)["sensors"]
    assert (sensors["TI2"]["disarmed"], sensors["TI1"]["disarmed"]) == (reason, None)
    assert sensors["TI2"]["achieved_run_length"] is None


def test_an_earlier_commissioning_counts_for_nothing(command: Any, model: Path, tmp_path: Path) -> None:
    data = history(tmp_path, read_model_file(model), wandering(0.5, 0.1))
    first, second = tmp_path / "first.toml", tmp_path / "second.toml"
    assert command("commission", model, data, "--out", first).status == 0
    model.write_text(with_fault_tests(MODEL, "m", {"TI1": 2.0, "TI2": 2.5}, {}), encoding="utf-8")
    assert command("commission", model, data, "--out", second).status == 0
    assert read_model_file(first).widening == read_model_file(second).widening


def test_too_short_a_stretch_is_bad_input(command: Any, model: Path, tmp_path: Path) -> None:
    spec = read_model_file(model)
    path = tmp_path / "short.parquet"
    record(spec, 500, 1, move=0.0).history().to_parquet(path)
    done = command("commission", model, path, "--out", tmp_path / "out.toml")
    assert (done.status, done.out) == (2, "")
    assert "TI1 has " in done.err
    assert "expected at least 2000" in done.err
    assert not (tmp_path / "out.toml").exists()


def test_the_file_that_is_read_is_never_written(command: Any, model: Path, tmp_path: Path) -> None:
    done = command("commission", model, tmp_path / "none.csv", "--out", model)
    assert done.status == 2
    assert "expected another name" in done.err
