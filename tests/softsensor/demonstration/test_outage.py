"""The story's drift with the connection gone while it begins: the thermometer is named all the same, and no other."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import softsensor
from plant_models.plant_model import PlantModel
from plant_models.simulators import reactor_model_path
from plant_models.simulators.scenario import DemoScenario
from softsensor.demonstration.plant_side import demo_tank

START = 1_796_083_200_000_000
HOUR = 3_600_000_000


@pytest.fixture(scope="module")
def model() -> PlantModel:
    return softsensor.load_model(str(reactor_model_path()))


def readings(model: PlantModel, seed: int, hours: float) -> pd.DataFrame:
    """What the plant's instruments show, every 10 s."""
    tags = [item.tag for item in model.spec.inputs] + [item.tag for item in model.spec.sensors]
    tank, rows = demo_tank(DemoScenario(seed=seed), START), []
    for scan in tank.readings(START + round(hours * HOUR)):
        shown = {item.tag: item.value for item in scan}
        rows.append([scan[0].time, *(shown.get(tag, np.nan) for tag in tags)])
    table = pd.DataFrame(rows, columns=["time", *tags])
    return table.assign(time=pd.to_datetime(table["time"], unit="us", utc=True))


@pytest.mark.parametrize(("seed", "away"), [(10, (4.1, 4.45)), (1, (4.0, 4.33))])
def test_a_drift_that_began_in_an_outage_is_named(
    model: PlantModel, seed: int, away: tuple[float, float]
) -> None:
    """The outage hides the drift's first minutes, and the tests rest for three times as long as it lasts."""
    table = readings(model, seed, 6.0)
    hours = (table["time"] - table["time"].iloc[0]).dt.total_seconds() / 3600.0
    found = softsensor.replay(model, table[(hours < away[0]) | (hours > away[1])]).flags
    shifts = found[found["kind"].isin(["bias", "drift", "model"])]
    assert shifts["tag"].tolist() == ["TI2101A"]
    assert shifts["group"].tolist() == ["TI2101A"]
    assert abs(float(shifts["size"].iloc[0]) - 0.7 * 1.1) < 0.5
