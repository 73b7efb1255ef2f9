"""A log analyser as a user has it: coarse display, tuning, what is promised; against the unit in its logarithms."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest

import softsensor
from connectors.files import history_from_frame
from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.plant_model import PlantModel
from softsensor.cli.check import as_document
from softsensor.service.assembly import rules_of
from softsensor.service.model_report import ModelReport, model_report
from softsensor.service.report_tables import knowledge_tables, paths_table
from softsensor.service.tuned_file import changed_text
from softsensor.service.tuning import tune

TEXT = """\
[unit]
name = "C-1"
sample_time = "1 min"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 10.0
range = [0.0, 20.0]

[[sensor]]
tag = "AI1"
unit = "ppm"
operating_point = 40.0
range = [0.0, 200.0]
noise_sd = 2.0
tolerance = 8.0
transform = "log"

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 80.0
range = [0.0, 200.0]
noise_sd = 0.2

[[estimate]]
tag = "AY1"
unit = "ppm"
operating_point = 5.0
range = [0.0, 50.0]
bias_walk_sd = 0.05
lab = { tag = "AL1", sd = 0.25 }
transform = "log"

[[disturbance]]
name = "feed"
sd = 0.3
time_constant = "2 h"

[[transfer_function]]
from = "FI1"
to = "AI1"
gain = -0.5
time_constants = ["5 min"]

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = 1.0
time_constants = ["5 min"]

[[transfer_function]]
from = "feed"
to = "AI1"
gain = 1.0
time_constants = ["10 min"]

[[transfer_function]]
from = "feed"
to = "TI1"
gain = 2.0
time_constants = ["8 min"]

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 1.2
time_constants = ["20 min"]
"""
SLOPES = {"AI1": 1.0 / 40.0, "TI1": 1.0, "AY1": 1.0 / 5.0}
OFFSETS = {"AI1": math.log(40.0), "AY1": math.log(5.0)}


@pytest.fixture(scope="module")
def model() -> PlantModel:
    return build_plant_model(parse_model_text(TEXT, "c1.toml"))


@pytest.fixture(scope="module")
def plain_text() -> str:
    """The same unit in logarithms, written by hand."""
    text = TEXT.replace('transform = "log"\n', "")
    for before, after in (
        (
            "operating_point = 40.0\nrange = [0.0, 200.0]",
            f"operating_point = {OFFSETS['AI1']}\nrange = [-2.0, 8.0]",
        ),
        ("noise_sd = 2.0\ntolerance = 8.0", "noise_sd = 0.05\ntolerance = 0.2"),
        (
            "operating_point = 5.0\nrange = [0.0, 50.0]",
            f"operating_point = {OFFSETS['AY1']}\nrange = [-2.0, 8.0]",
        ),
        ("bias_walk_sd = 0.05", "bias_walk_sd = 0.01"),
        ("sd = 0.25 }", "sd = 0.05 }"),
    ):
        assert before in text
        text = text.replace(before, after)
    return text


def simulated(cycles: int, seed: int, move: float = 0.0) -> pd.DataFrame:
    """Readings of the unit, not drawn by our code: first-order lags step by step, noise of 4 % and 0.3 K."""
    rng = np.random.default_rng(seed)
    d = lag_a = lag_t = in_a = in_t = 0.0
    u = 10.0 + move * np.cumsum((rng.random(cycles) < 0.01) * rng.choice([-1.0, 1.0], cycles))
    rows = np.zeros((cycles, 2))
    for k in range(cycles):
        rows[k] = 40.0 * np.exp(in_a + lag_a), 80.0 + in_t + lag_t
        in_a += (1.0 - np.exp(-1.0 / 5.0)) * (-0.5 * (u[k] - 10.0) - in_a)
        in_t += (1.0 - np.exp(-1.0 / 5.0)) * (u[k] - 10.0 - in_t)
        lag_a += (1.0 - np.exp(-1.0 / 10.0)) * (d - lag_a)
        lag_t += (1.0 - np.exp(-1.0 / 8.0)) * (2.0 * d - lag_t)
        d = np.exp(-1.0 / 120.0) * d + 0.3 * np.sqrt(1.0 - np.exp(-2.0 / 120.0)) * rng.standard_normal()
    rows[:, 0] *= np.exp(0.04 * rng.standard_normal(cycles))
    rows[:, 1] += 0.3 * rng.standard_normal(cycles)
    times = pd.date_range("2026-12-01", periods=cycles, freq="1min", tz="UTC")
    return pd.DataFrame({"time": times, "FI1": u, "AI1": rows[:, 0], "TI1": rows[:, 1]})


def in_logarithms(frame: pd.DataFrame) -> pd.DataFrame:
    return frame.assign(AI1=np.log(frame["AI1"]))


def test_tuning_finds_the_noise_in_the_unit_of_the_file(model: PlantModel, plain_text: str) -> None:
    frame, plain = simulated(1500, 3), build_plant_model(parse_model_text(plain_text, "c1.toml"))
    tags = rules_of(model.spec).tags
    found = tune(model, history_from_frame(frame, tags))
    expected = tune(plain, history_from_frame(in_logarithms(frame), tags))
    assert found.refusals == expected.refusals == ()
    scale = {"AI1.noise_sd": 40.0}
    for one, other in zip(found.numbers, expected.numbers, strict=True):
        assert one.parameter.name == other.parameter.name
        factor = scale.get(one.parameter.name, 1.0)
        ours, theirs = (np.array((item.fitted, item.low, item.high)) for item in (one, other))
        np.testing.assert_allclose(ours, theirs * factor, rtol=1e-4)
    noise = next(item for item in found.numbers if item.parameter.name == "AI1.noise_sd")
    assert noise.low < 0.04 * 40.0 < noise.high
    np.testing.assert_allclose(found.check_log_likelihood, expected.check_log_likelihood, rtol=1e-4)
    for one_sensor, same in zip(found.sensors, expected.sensors, strict=True):
        np.testing.assert_allclose(one_sensor.nis_after, same.nis_after, rtol=1e-3)
        np.testing.assert_allclose(one_sensor.whiteness_after, same.whiteness_after, atol=1e-4)
    written = parse_model_text(changed_text(TEXT, "c1.toml", found.changes), "c1.toml")
    assert written.sensors[0].noise_sd == noise.written
    assert written.sensors[0].transform == model.spec.sensors[0].transform


@pytest.fixture(scope="module")
def reports(model: PlantModel, plain_text: str) -> tuple[ModelReport, ModelReport]:
    """Of the unit with transforms; of the one in logarithms, its ranges as wide as the others at the operating point."""
    plain = parse_model_text(plain_text, "c1.toml")
    at, slope = OFFSETS["AI1"], SLOPES["AI1"]
    first = replace(plain.sensors[0], range=(at - 40.0 * slope, at + 160.0 * slope))
    sensors = (first, *plain.sensors[1:])
    return model_report(model), model_report(build_plant_model(replace(plain, sensors=sensors)))


def test_the_report_is_in_engineering_units_at_the_operating_point(
    reports: tuple[ModelReport, ModelReport],
) -> None:
    for one, other in zip(reports[0].estimates, reports[1].estimates, strict=True):
        slope = SLOPES[one.tag]
        for name in ("sd_without_sensors", "sd_with_sensors"):
            np.testing.assert_allclose(getattr(one, name) * slope, getattr(other, name), rtol=1e-7)
        np.testing.assert_allclose(
            [sd * slope for _, sd in one.sd_without], [sd for _, sd in other.sd_without], rtol=1e-7
        )
        assert one.lab is not None
        assert other.lab is not None
        np.testing.assert_allclose(
            (one.lab.sd * slope, one.lab.lasting), (other.lab.sd, other.lab.lasting), rtol=1e-7
        )
    for one, other in zip(reports[0].prospects, reports[1].prospects, strict=True):
        slope = SLOPES[one.tag]
        found = [one.sd, *(item.sd for item in one.changes), *(sd for _, sd in one.after_result)]
        expected = [other.sd, *(item.sd for item in other.changes), *(sd for _, sd in other.after_result)]
        np.testing.assert_allclose(np.array(found) * slope, expected, rtol=1e-7)


def test_the_sheet_is_in_the_sensor_s_unit_at_the_operating_point(
    reports: tuple[ModelReport, ModelReport],
) -> None:
    for one, other in zip(reports[0].sensors, reports[1].sensors, strict=True):
        slope = SLOPES[one.shift.tag]
        np.testing.assert_allclose(one.shift.bias * slope, other.shift.bias, rtol=1e-7)
        np.testing.assert_allclose(one.shift.innovation_sd * slope, other.shift.innovation_sd, rtol=1e-7)
        assert abs(one.shift.settled - other.shift.settled) < 1e-7
        ours, theirs = (
            np.array([np.nan if x is None else x for x in (*line.found.steps, *line.found.ramps)])
            for line in (one, other)
        )
        np.testing.assert_allclose(ours * slope, theirs, rtol=1e-5)
        ours, theirs = (np.array([told.size for told in line.told]) for line in (one, other))
        np.testing.assert_allclose(ours * slope, theirs, rtol=1e-5)
        ours, theirs = (np.array([told.named for told in line.told]) for line in (one, other))
        np.testing.assert_allclose(ours, theirs, atol=0.02)


def test_the_report_shows_the_transforms(reports: tuple[ModelReport, ModelReport], model: PlantModel) -> None:
    table = knowledge_tables(reports[0])[0]
    assert table.title == "Transforms and physical limits"
    assert [row[:3] for row in table.rows] == [("AI1", "log", "0.025 per ppm"), ("AY1", "log", "0.2 per ppm")]
    units = {row[0]: row[1].split(" ", 1)[1] for row in paths_table(reports[0]).rows}
    assert units["FI1 -> AI1"] == "log(ppm) per m3/h"
    assert units["FI1 -> TI1"] == "K per m3/h"
    assert knowledge_tables(reports[1])[0].title != table.title
    document: dict[str, Any] = as_document(reports[0])
    assert [item["tag"] for item in document["scales"]] == ["AI1", "AY1"]
    limited = replace(model.spec, estimates=(replace(model.spec.estimates[0], limits=(0.0, np.inf)),))
    shown = model_report(build_plant_model(limited))
    assert knowledge_tables(shown)[0].rows[1][-1] == "0 to inf ppm"
    assert as_document(shown)["scales"][1]["limits"] == [0.0, None]


def test_a_coarse_display_at_low_values_is_not_taken_for_stuck(model: PlantModel) -> None:
    """A step of the display is 0.05 sd of the noise at 80 ppm and 2 sd at 2 ppm: there equal readings are nothing special.

    The same readings do get the flag where nearly all of them are equal although the noise spans many steps.
    """
    frame = simulated(1200, 8)
    frame["FI1"] = np.where(np.arange(1200) < 600, 8.6, 16.0)
    rng = np.random.default_rng(4)
    level = np.where(np.arange(1200) < 600, 80.0, 2.0)
    frame["AI1"] = np.round(level * np.exp(0.05 * rng.standard_normal(1200)) / 0.2) * 0.2
    result = softsensor.replay(model, frame)
    assert "stuck" not in set(result.flags["kind"])
    low = frame.loc[600:, "AI1"].to_numpy()
    assert np.mean(low[1:] == low[:-1]) > 0.4
    frame.loc[400:599, "AI1"] = 80.0
    flags = softsensor.replay(model, frame).flags
    assert list(flags.loc[flags["kind"] == "stuck", "tag"]) == ["AI1"]


def test_the_summary_is_in_engineering_units_and_coverage_in_either(
    model: PlantModel, plain_text: str
) -> None:
    frame = simulated(900, 5, move=0.2)
    times = frame["time"]
    rng = np.random.default_rng(6)
    labs = pd.DataFrame(
        {
            "sampled_at": times.iloc[100:880:60].to_list(),
            "reported_at": times.iloc[110:890:60].to_list(),
            "tag": "AL1",
            "value": 5.0 * np.exp(0.1 * rng.standard_normal(13)),
        }
    )
    found = softsensor.replay(model, frame, labs, smooth=True)
    plain = build_plant_model(parse_model_text(plain_text, "c1.toml"))
    other = softsensor.replay(
        plain, in_logarithms(frame), labs.assign(value=np.log(labs["value"])), smooth=True
    )
    used = found.lab_results[found.lab_results["status"] == "used"]
    assert len(used) >= 8
    errors = used["value"].to_numpy() - used["predicted"].to_numpy()
    summary, logs = found.summary["estimates"]["AY1"], other.summary["estimates"]["AY1"]
    np.testing.assert_allclose(summary["rmsep"], np.sqrt(np.mean(errors**2)), rtol=1e-12)
    np.testing.assert_allclose(summary["bias"], errors.mean(), rtol=1e-12)
    assert (summary["lab_count"], summary["coverage"]) == (logs["lab_count"], logs["coverage"])
    for name in ("nis", "whiteness"):
        np.testing.assert_allclose(
            found.summary["sensors"]["AI1"][name], other.summary["sensors"]["AI1"][name], rtol=1e-6
        )
    assert found.smoothed is not None
    assert other.smoothed is not None
    for name in ("value", "lower", "upper"):
        np.testing.assert_allclose(found.smoothed[name], np.exp(other.smoothed[name]), rtol=1e-7)
    np.testing.assert_allclose(
        found.smoothed["sd"], found.smoothed["value"] * other.smoothed["sd"], rtol=1e-6
    )


def test_late_readings_of_transformed_tags_count_as_if_in_time(model: PlantModel, plain_text: str) -> None:
    """An hour of the analyser comes two hours late, zeros among it: the same as in logarithms, the zeros not there."""
    frame = simulated(600, 12)
    late_at = np.arange(200, 260)
    late = pd.DataFrame(
        {
            "time": frame["time"].iloc[late_at].to_list(),
            "arrived_at": frame["time"].iloc[late_at + 120].to_list(),
            "tag": "AI1",
            "value": frame["AI1"].iloc[late_at].to_numpy(),
        }
    )
    frame.loc[200:259, "AI1"] = np.nan
    with_zeros = late.copy()
    with_zeros.loc[::7, "value"] = 0.0
    found = softsensor.replay(model, frame, late=with_zeros)
    logs = late.drop(index=late.index[::7]).assign(value=lambda rows: np.log(rows["value"]))
    plain = build_plant_model(parse_model_text(plain_text, "c1.toml"))
    expected = softsensor.replay(plain, in_logarithms(frame), late=logs)
    np.testing.assert_allclose(found.estimates["value"], np.exp(expected.estimates["value"]), rtol=1e-7)
    without = softsensor.replay(plain, in_logarithms(frame))
    assert np.abs(without.estimates["value"] - expected.estimates["value"]).max() > 1e-6
