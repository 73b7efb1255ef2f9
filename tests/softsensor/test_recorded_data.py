"""The library's replay of data frames: the same as the command's of files, column by column."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import softsensor
from connectors.errors import HistoryFileError, LabFileError
from plant_models.library import published_model_path
from plant_models.plant_model import PlantModel
from softsensor.cli.main import main
from softsensor.errors import ReplayError
from softsensor.service.result_tables import ESTIMATE_COLUMNS, FLAG_COLUMNS, INNOVATION_COLUMNS

MODEL = published_model_path("wood_berry")
CYCLES = 300


@pytest.fixture(scope="module")
def model() -> PlantModel:
    return softsensor.load_model(MODEL)


@pytest.fixture(scope="module")
def history(model: PlantModel) -> pd.DataFrame:
    random = np.random.default_rng(4)
    step = pd.Timedelta(seconds=model.spec.sample_time)
    columns: dict[str, object] = {"time": pd.date_range("2026-12-01", periods=CYCLES, freq=step, tz="UTC")}
    for item in model.spec.inputs:
        columns[item.tag] = item.operating_point + 0.01 * random.standard_normal(CYCLES)
    for sensor in model.spec.sensors:
        values = sensor.operating_point + sensor.noise_sd * random.standard_normal(CYCLES)
        values[random.random(CYCLES) < 0.05] = np.nan
        columns[sensor.tag] = values
    return pd.DataFrame(columns)


@pytest.fixture(scope="module")
def lab(model: PlantModel, history: pd.DataFrame) -> pd.DataFrame:
    item = next(estimate for estimate in model.spec.estimates if estimate.lab is not None)
    assert item.lab is not None
    times = history["time"]
    return pd.DataFrame(
        {
            "sampled_at": [times[50], times[120]],
            "reported_at": [times[90], times[200]],
            "tag": item.lab.tag,
            "value": item.operating_point,
        }
    )


def test_frames_and_files_give_the_same_tables_and_digest(
    model: PlantModel,
    history: pd.DataFrame,
    lab: pd.DataFrame,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    before = history.copy(), lab.copy()
    result = softsensor.replay(model, history, lab)
    pd.testing.assert_frame_equal(history, before[0])
    pd.testing.assert_frame_equal(lab, before[1])
    assert tuple(result.estimates.columns) == ESTIMATE_COLUMNS
    assert tuple(result.innovations.columns) == INNOVATION_COLUMNS
    assert tuple(result.flags.columns) == FLAG_COLUMNS
    assert len(result.estimates) == CYCLES * len(model.spec.estimates)
    assert len(result.innovations) == CYCLES * len(model.spec.sensors)
    assert result.summary["cycles"] == CYCLES
    for kind in ("csv", "parquet"):
        history.to_csv(tmp_path / "history.csv", index=False, float_format="%.17g")
        lab.to_csv(tmp_path / "lab.csv", index=False, float_format="%.17g")
        out = tmp_path / kind
        arguments = ["replay", MODEL, tmp_path / "history.csv", "--lab", tmp_path / "lab.csv", "--out", out]
        monkeypatch.setattr(sys, "argv", ["softsensor", *map(str, arguments), "--format", kind, "--json"])
        with pytest.raises(SystemExit) as left:
            main()
        assert not left.value.code
        for name, table in (("estimates", result.estimates), ("innovations", result.innovations)):
            path = out / f"{name}.{kind}"
            read = pd.read_csv(path, keep_default_na=True) if kind == "csv" else pd.read_parquet(path)
            for column in table.select_dtypes("number").columns:
                # 17 significant digits give back every bit
                np.testing.assert_array_equal(read[column].to_numpy(float), table[column].to_numpy(float))
            times = pd.to_datetime(read["time"], utc=True)
            assert (times.array == table["time"].array).all()
        assert pd.read_json(out / "summary.json", typ="series")["digest"] == result.summary["digest"]


def test_the_interval_is_the_normal_95_percent(model: PlantModel, history: pd.DataFrame) -> None:
    table = softsensor.replay(model, history).estimates
    # 97.5 % quantile of the standard normal: 1.959963984540054 (MEMORY, any table)
    width = (table["upper"] - table["lower"]).to_numpy()
    assert np.allclose(width, 2 * 1.959963984540054 * table["sd"].to_numpy(), rtol=1e-12)


def test_frames_that_cannot_be_used(model: PlantModel, history: pd.DataFrame, lab: pd.DataFrame) -> None:
    tag = model.sensor_tags[0]
    with pytest.raises(HistoryFileError, match=tag):
        softsensor.replay(model, history.drop(columns=tag))
    with pytest.raises(HistoryFileError, match="time"):
        softsensor.replay(model, history.iloc[::-1].reset_index(drop=True))
    with pytest.raises(HistoryFileError, match="zone"):
        softsensor.replay(model, history.assign(time=history["time"].dt.tz_localize(None)))
    with pytest.raises(HistoryFileError, match="no rows"):
        softsensor.replay(model, history.iloc[:0])
    with pytest.raises(HistoryFileError, match="inf"):
        softsensor.replay(model, history.assign(**{tag: np.inf}))
    with pytest.raises(LabFileError, match="value"):
        softsensor.replay(model, history, lab.drop(columns="value"))


def test_a_history_between_two_cycles_has_none(model: PlantModel, history: pd.DataFrame) -> None:
    row = history.iloc[:1].assign(time=[pd.Timestamp("2026-12-01T00:00:01Z")])
    with pytest.raises(ReplayError, match="no cycle lies within it"):
        softsensor.replay(model, row)


def test_a_local_time_is_taken_with_its_zone(model: PlantModel, history: pd.DataFrame) -> None:
    local = history.assign(time=history["time"].dt.tz_convert("Europe/Berlin").dt.tz_localize(None))
    digests = {
        softsensor.replay(model, frame, timezone=zone).summary["digest"]
        for frame, zone in ((history, None), (local, "Europe/Berlin"))
    }
    assert len(digests) == 1
