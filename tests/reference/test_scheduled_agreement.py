"""Paths that change with an input against the dense filter, whose matrices are made anew in every cycle."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.agreement import agree, check, compare
from independent.batch_conditioning import given_everything
from independent.dense_filter import filter_in_order, output_names
from independent.recorded_runs import Run, by_cycle, record
from independent.scheduled_units import disturbed, scheduled_unit

import softsensor
from plant_models.building import build_plant_model
from plant_models.specification import PathSpec, ScheduleSpec, UnitSpec
from softsensor.estimation.noise_tuning.deviations import deviations
from softsensor.estimation.noise_tuning.maximum_likelihood import NoiseFit
from softsensor.estimation.noise_tuning.parameters import noise_parameters

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
    ways = [(spec, path) for spec, path in found if disturbed(path, spec)]
    assert any(path.source == item.at_input for spec, path in ways for item in spec.disturbances)
    assert any(path.source == item.name for spec, path in ways for item in spec.disturbances)
    assert any(path.dead_time % spec.sample_time > 0.0 for spec, path in ways)
    assert any(len(path.time_constants) == len(path.lead_times) for _, path in ways)


def moving(spec: UnitSpec, cycles: int, seed: int) -> Run:
    """A tag that is never still: a measured flow."""
    run = record(spec, cycles, seed, gaps=0.1)
    rng = np.random.default_rng([5, seed])
    return replace(run, u=run.u + rng.normal(0.0, 0.3, run.u.shape))


@pytest.mark.parametrize("seed", SEEDS[:4])
def test_a_tag_that_is_never_still(seed: int) -> None:
    spec = scheduled_unit(seed)
    run = moving(spec, 300, seed)
    result = softsensor.replay(build_plant_model(spec), run.history())
    compare(
        run, result, filter_in_order(spec, run.u, run.y, run.uncertain, gate=np.full(run.y.shape[1], 8.0))
    )


@pytest.mark.parametrize("seed", [1, 2, 6, 8])
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


def test_disturbances_that_integrate_through_a_schedule() -> None:
    """At an input whose integrating paths change with another, with and without lags, leads, fractions of a sample."""
    spec = scheduled_unit(4)
    Ts, source, tag = spec.sample_time, spec.inputs[0].tag, spec.inputs[-1]
    own = replace(spec.disturbances[0], at_input=None)
    walker = replace(
        own, name="walker", sd=None, time_constant=None, walk_sd=1.0, initial_sd=0.4, at_input=source
    )
    mover = replace(own, name="mover", sd=0.5, time_constant=30.0 * Ts, walk_sd=None, at_input=source)
    at = tuple(tag.operating_point + value for value in (-2.0, 0.0, 3.0))
    gain = (0.03 / Ts, 0.05 / Ts, 0.09 / Ts)
    forms = [
        ((6.0 * Ts,), (4.0 * Ts,), (2.0 * Ts,), (), 1.4 * Ts),
        ((), (), (), (), 0.7 * Ts),
        ((3.0 * Ts, 9.0 * Ts), (5.0 * Ts, 5.0 * Ts), (8.0 * Ts, 4.0 * Ts), (-2.0 * Ts,), 2.0 * Ts),
    ]
    integrating = tuple(
        PathSpec(
            source, name, gain[1], lags[1], leads, delay, True, schedule=ScheduleSpec(tag.tag, at, gain, lags)
        )
        for name, (*lags, leads, delay) in zip(output_names(spec), forms * 2, strict=False)
        for lags in [tuple(lags)]
    )
    kept = tuple(path for path in spec.paths if path.source == own.name)
    check(replace(spec, disturbances=(own, walker, mover), paths=kept + integrating), 200, 5, 6)


@pytest.mark.parametrize("seed", [2, 8])
def test_the_likelihood_of_tuning_is_the_dense_filters(seed: int) -> None:
    """log L with disturbances through schedules, and its gradient against differences."""
    spec = scheduled_unit(seed)
    run = moving(spec, 300, seed)
    model, parameters = build_plant_model(spec), noise_parameters(spec)
    scale = np.where(run.uncertain, 9.0, 1.0)
    seen = deviations(model, run.u, run.y, scale, np.zeros(len(run.u), dtype=np.int64))
    fit = NoiseFit(model, parameters, seen)
    theta = np.log([item.value for item in parameters])
    found = fit.at(theta)
    expected = filter_in_order(spec, run.u, run.y, run.uncertain)
    assert found.value == pytest.approx(-expected.minus_log_l, rel=1e-9)
    for j in range(len(theta)):
        step = np.zeros(len(theta))
        step[j] = 1e-5
        slope = (fit.at(theta + step).value - fit.at(theta - step).value) / 2e-5
        assert found.gradient[j] == pytest.approx(slope, rel=1e-5, abs=1e-5)
