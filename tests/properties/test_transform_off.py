"""A file without transforms: the same numbers as if there were no such keys, bit for bit."""

from __future__ import annotations

from dataclasses import fields, make_dataclass, replace
from typing import Any

import numpy as np
import pytest
from independent.random_models import random_unit
from independent.recorded_runs import late_labs, record, spoilt
from independent.replaying import readings_of

import softsensor
from plant_models.building import _canonical, build_plant_model
from softsensor.cycle import block_inputs, usable
from softsensor.detection.flags import FlagBook
from softsensor.unit_design import design_unit

NEW_KEYS = ("transform", "limits")


def without_the_keys(item: Any) -> Any:
    """The same frozen values in a class that never had the new keys."""
    kept = [field.name for field in fields(item) if field.name not in NEW_KEYS]
    return make_dataclass("Old", kept, frozen=True)(**{name: getattr(item, name) for name in kept})


@pytest.mark.parametrize("seed", range(1, 9))
def test_the_model_s_digest_is_taken_over_the_same_bytes_as_before_the_keys(seed: int) -> None:
    spec = random_unit(seed)
    for item in (*spec.inputs, *spec.sensors, *spec.estimates):
        assert _canonical(item) == _canonical(without_the_keys(item))
        for name in NEW_KEYS:
            if hasattr(item, name):
                given = replace(item, **{name: (0.0, 1.0)})
                assert _canonical(given) != _canonical(item)


@pytest.mark.parametrize("seed", range(1, 9))
def test_the_loop_gets_the_very_readings(seed: int) -> None:
    """Assembled readings go into the compiled loop as they are: same bits, inputs without a copy."""
    run = spoilt(record(random_unit(seed), 200, seed, 0.1), seed)
    model = build_plant_model(run.spec)
    assert model.scaled is model.spec
    design = design_unit(model)
    readings = readings_of(run)
    data = block_inputs(design, FlagBook(), 0, readings, ())
    assert data.u is readings.u
    low, high = design.limits
    bad = (readings.y_quality > 1) | (readings.y < low) | (readings.y > high)
    assert data.y.tobytes() == np.where(bad, np.nan, readings.y).tobytes()
    assert usable(design, readings)[0].tobytes() == data.y.tobytes()


@pytest.mark.parametrize("seed", [1, 4, 7])
def test_what_is_shown_is_what_the_estimator_has(seed: int) -> None:
    run = record(random_unit(seed), 150, seed, 0.1)
    frame, _ = late_labs(run, 5, seed, latest=40)
    result = softsensor.replay(build_plant_model(run.spec), run.history(), frame)
    table = result.estimates
    half = 1.959963984540054 * table["sd"]
    assert (table["lower"] == table["value"] - half).all()
    assert (table["upper"] == table["value"] + half).all()
    seen = result.innovations[result.innovations["reading"].notna()]
    assert (seen["innovation"] == seen["reading"] - seen["predicted"]).all()
    labs = result.lab_results
    assert (labs["innovation"] == labs["value"] - labs["predicted"]).all()


@pytest.mark.parametrize("seed", [2, 3, 5])
def test_physical_limits_change_what_is_shown_of_an_estimate_and_nothing_else(seed: int) -> None:
    """The state is never clipped: predictions, sd and what laboratory results do are the same to the last bit."""
    run = record(random_unit(seed), 150, seed, 0.1)
    frame, _ = late_labs(run, 5, seed, latest=40)
    free = softsensor.replay(build_plant_model(run.spec), run.history(), frame, smooth=True)
    tag = run.spec.estimates[0].tag
    own = free.estimates["tag"] == tag
    middle = float(free.estimates.loc[own, "value"].median())
    first = replace(run.spec.estimates[0], limits=(middle, np.inf))
    spec = replace(run.spec, estimates=(first, *run.spec.estimates[1:]))
    held = softsensor.replay(build_plant_model(spec), run.history(), frame, smooth=True)
    assert held.innovations.equals(free.innovations)
    assert held.lab_results.equals(free.lab_results)
    assert held.flags.equals(free.flags)
    assert held.estimates["sd"].equals(free.estimates["sd"])
    assert held.estimates[~own].equals(free.estimates[~own])
    for table in (held.estimates, held.smoothed):
        shown = table[table["tag"] == tag]
        assert (shown["lower"] >= middle).all()
        assert (shown["lower"] <= shown["value"]).all()
        assert (shown["value"] <= shown["upper"]).all()
    outside = free.estimates.loc[own, "value"] < middle
    assert 0 < outside.sum() < own.sum()
    shown = held.estimates[own]
    reason = f"the model puts {tag} beyond its limits, {middle:g} to inf"
    assert (shown["reason"].str.contains(reason, regex=False) == outside).all()
    assert (shown.loc[outside, "status"] == "Uncertain").all()
