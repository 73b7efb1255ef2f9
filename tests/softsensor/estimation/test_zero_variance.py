"""An estimate that is known exactly has a standard deviation of zero, not of nan."""

from __future__ import annotations

import numpy as np
import pandas as pd

import softsensor
from plant_models.building import build_plant_model
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)

WASHOUT = UnitSpec(
    name="U-1",
    title="an estimate behind a washout",
    sample_time=1.0,
    inputs=(InputSpec("FI1", "m3/h", 0.0, (-9.0, 9.0)),),
    sensors=(SensorSpec("TI1", "degC", 0.0, (-99.0, 99.0), 0.1, 0.4),),
    estimates=(EstimateSpec("AY1", "mol/L", 0.0, (-9.0, 9.0)),),
    disturbances=(DisturbanceSpec("feed", walk_sd=1.0, initial_sd=0.5),),
    paths=(
        PathSpec("FI1", "TI1", 1.0, (5.0,)),
        PathSpec("feed", "TI1", 1.0, (4.0,)),
        PathSpec("feed", "AY1", dead_time=2.6, numerator=(5.0, 0.0), denominator=(121.0, 11.0, 1.0)),
    ),
    false_flag_interval=30 * 86400.0,
)


def test_the_sd_of_an_estimate_that_nothing_has_reached_yet_is_zero() -> None:
    """Contract: a random walk starts with what it drives in steady state; a washout's steady state is zero, exactly."""
    times = pd.date_range("2026-01-01", periods=8, freq="1s", tz="UTC")
    history = pd.DataFrame({"time": times, "FI1": 0.0, "TI1": 0.0})
    sd = softsensor.replay(build_plant_model(WASHOUT), history).estimates["sd"].to_numpy()
    assert np.all(sd[:3] <= 1e-12)
    assert np.all(np.isfinite(sd))
    assert sd[-1] > 0.0
