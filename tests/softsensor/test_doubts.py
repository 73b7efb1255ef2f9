"""An estimate says Uncertain, and why, while a flagged instrument is in it or laboratory results do not fit."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import softsensor
from plant_models.building import build_plant_model
from plant_models.plant_model import PlantModel
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    LabSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)

SAMPLE = 10.0
SENSORS = ("TI1", "TI2", "TI3")
UNIT = UnitSpec(
    name="U-7",
    title="three thermometers",
    sample_time=SAMPLE,
    inputs=(InputSpec("FI1", "m3/h", 10.0, (0.0, 20.0)),),
    sensors=tuple(SensorSpec(tag, "degC", 90.0, (0.0, 200.0), 0.15, 0.6) for tag in SENSORS),
    estimates=(EstimateSpec("AY1", "mol/L", 1.3, (0.0, 4.0), lab=LabSpec("AL1", 0.02)),),
    disturbances=(DisturbanceSpec("feed", sd=0.08, time_constant=5400.0),),
    paths=(
        *(PathSpec("FI1", tag, -1.9, (250.0,)) for tag in SENSORS),
        PathSpec("FI1", "AY1", 0.1, (300.0,)),
        *(PathSpec("feed", tag, 12.0, (360.0,)) for tag in SENSORS),
        PathSpec("feed", "AY1", 0.8, (600.0,)),
    ),
    false_flag_interval=30 * 86400.0,
)


@pytest.fixture(scope="module")
def model() -> PlantModel:
    return build_plant_model(UNIT)


def history(model: PlantModel, cycles: int, seed: int) -> tuple[pd.DataFrame, np.ndarray]:
    """Readings simulated from the model itself, and the true concentration."""
    rng, part = np.random.default_rng(seed), model.stochastic
    x, outputs = np.zeros(len(part.q)), np.empty((cycles, 4))
    for k in range(cycles):
        outputs[k] = part.C @ x
        x = part.A @ x + np.sqrt(part.q) * rng.normal(size=len(x))
    times = pd.date_range("2026-01-01", periods=cycles, freq="10s", tz="UTC")
    columns = {tag: 90.0 + outputs[:, i] + 0.15 * rng.normal(size=cycles) for i, tag in enumerate(SENSORS)}
    return pd.DataFrame({"time": times, "FI1": 10.0, **columns}), 1.3 + outputs[:, 3]


def test_a_flagged_sensor_that_is_still_used_makes_the_estimate_uncertain(model: PlantModel) -> None:
    frame, _ = history(model, 1500, 1)
    frame.loc[600:, "TI1"] += 1.5
    result = softsensor.replay(model, frame)
    flag = result.flags.iloc[0]
    assert (flag.tag, flag.group) == ("TI1", "TI1")
    after = result.estimates[result.estimates.time > flag.detected]
    assert (after.status == "Uncertain").all()
    assert after.reason.str.contains(r"TI1 is flagged \(bias\)").all()
    assert (result.estimates[result.estimates.time <= flag.detected].status == "Good").all()


def test_a_flag_outlives_a_gap_in_the_data(model: PlantModel) -> None:
    """Nobody has seen the fault end: an hour without any reading clears nothing and gives no new name."""
    frame, _ = history(model, 3000, 2)
    frame.loc[600:, "TI1"] += 1.5
    gap = frame.drop(index=range(1000, 1360))
    result = softsensor.replay(model, gap)
    assert list(result.flags.tag) == ["TI1"]
    cleared = result.flags.cleared.iloc[0]
    assert pd.isna(cleared) or cleared > frame.time[1360] + pd.Timedelta("1h")


def test_two_results_in_a_row_that_do_not_fit_put_the_estimate_in_doubt(model: PlantModel) -> None:
    frame, truth = history(model, 1500, 3)
    lab = pd.DataFrame(
        {
            "sampled_at": [frame.time[k] for k in (200, 500, 800, 1100)],
            "reported_at": [frame.time[k] for k in (300, 600, 900, 1200)],
            "tag": "AL1",
            "value": [truth[200], truth[500] + 1.0, truth[800] + 1.0, truth[1100]],
        }
    )
    result = softsensor.replay(model, frame, lab)
    status = result.estimates.status.to_numpy()
    assert list(result.lab_results.status) == ["used", "waiting for a person", "waiting for a person", "used"]
    assert (status[:900] == "Good").all()
    assert (status[900:1200] == "Uncertain").all()
    assert "the last 2 laboratory results do not fit" in result.estimates.reason[1000]
    assert "the estimate may be wrong" in result.lab_results.reason[2]
    assert (status[1200:] == "Good").all()


def test_an_offset_makes_no_spikes_of_honest_noise(model: PlantModel) -> None:
    frame, _ = history(model, 6000, 4)
    frame.loc[300:, "TI1"] += 1.5
    result = softsensor.replay(model, frame)
    assert "spike" not in set(result.flags.kind)


def test_a_single_reading_far_out_is_a_spike(model: PlantModel) -> None:
    frame, _ = history(model, 1000, 5)
    frame.loc[500, "TI2"] += 3.0
    result = softsensor.replay(model, frame)
    assert list(zip(result.flags.tag, result.flags.kind, strict=True)) == [("TI2", "spike")]
