"""Paths that change with an input against the dense filter, whose matrices are made anew in every cycle."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.agreement import agree, check, compare
from independent.batch_conditioning import given_everything
from independent.dense_filter import filter_in_order
from independent.recorded_runs import Run, by_cycle, record
from independent.scheduled_units import scheduled_unit

import softsensor
from plant_models.building import build_plant_model
from plant_models.specification import UnitSpec

SEEDS = [seed for seed in range(1, 17) if any(path.schedule for path in scheduled_unit(seed).paths)]


@pytest.mark.parametrize("seed", SEEDS)
def test_random_models_with_schedules_agree_with_a_dense_filter(seed: int) -> None:
    """Missing and Uncertain readings, late laboratory results, a tag that steps within, across and beyond the points."""
    check(scheduled_unit(seed), 200, seed, 6)


def test_the_random_schedules_cover_what_a_model_file_can_say() -> None:
    found = [
        (spec, path)
        for seed in SEEDS
        for spec in [scheduled_unit(seed)]
        for path in spec.paths
        if path.schedule
    ]
    assert any(path.integrating for _, path in found)
    assert any(path.integrating and path.lead_times for _, path in found) or any(
        path.lead_times for _, path in found
    )
    assert any(not path.time_constants and not path.dead_time for _, path in found)
    assert any(path.dead_time % spec.sample_time > 0.0 for spec, path in found)
    assert any(len(path.time_constants) == len(path.lead_times) > 0 for _, path in found)
    schedules = [(path, path.schedule) for _, path in found if path.schedule is not None]
    assert any(path.source == schedule.tag for path, schedule in schedules)
    assert any(path.source != schedule.tag for path, schedule in schedules)
    assert {len(schedule.at) for _, schedule in schedules} >= {2, 3, 4, 5}


def moving(spec: UnitSpec, cycles: int, seed: int) -> Run:
    """A tag that is never still: a measured flow."""
    run = record(spec, cycles, seed, gaps=0.1)
    rng = np.random.default_rng([5, seed])
    return replace(run, u=run.u + rng.normal(0.0, 0.3, run.u.shape))


@pytest.mark.parametrize("seed", SEEDS[:6])
def test_a_tag_that_is_never_still(seed: int) -> None:
    spec = scheduled_unit(seed)
    run = moving(spec, 300, seed)
    result = softsensor.replay(build_plant_model(spec), run.history())
    compare(
        run, result, filter_in_order(spec, run.u, run.y, run.uncertain, gate=np.full(run.y.shape[1], 8.0))
    )


@pytest.mark.parametrize("seed", SEEDS[:4])
def test_smoothed_estimates_are_those_of_conditioning_on_everything(seed: int) -> None:
    spec = scheduled_unit(seed)
    spec = replace(spec, sensors=tuple(replace(item, gate=1e3) for item in spec.sensors))
    run = moving(spec, 60, seed)
    smoothed = softsensor.replay(build_plant_model(spec), run.history(), smooth=True).smoothed
    assert smoothed is not None
    tags = [item.tag for item in spec.estimates]
    expected, spread = given_everything(spec, run.u, run.y, run.uncertain)
    agree(by_cycle(smoothed, "value", tags), expected, np.abs(expected).max(axis=0))
    np.testing.assert_allclose(by_cycle(smoothed, "sd", tags), spread, rtol=1e-8)
