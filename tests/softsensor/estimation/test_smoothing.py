"""What smoothed estimates are and what they leave alone; their values are in tests/reference/test_smoothing_values.py."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from independent.batch_conditioning import given_everything
from independent.dense_filter import LabRow, filter_in_order, stochastic
from independent.random_models import random_unit
from independent.recorded_runs import Run, by_cycle, late_labs, record, spoilt
from independent.replaying import arrival, design_of, readings_of
from independent.transfer_paths import Array

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
from softsensor.estimation.kernel import Kernel, initial_state
from softsensor.estimation.lab_results import LabArrival
from softsensor.estimation.smoothing import (
    ScalarReadings,
    empty_trace,
    last_adjoint,
    run_backward,
    run_forward,
)
from softsensor.readings_of_cycle import CycleReadings
from softsensor.recorded_data import ReplayResult
from softsensor.service.replay import Replay, gathered, parts_of
from softsensor.service.smoothed_run import SmoothedRun

COLUMNS = ["time", "tag", "value", "sd", "lower", "upper"]
SPEC = random_unit(6)
"""Two estimates with laboratory results of both, dead times, disturbances that reach everything."""
CYCLES = 600
WIDE = (-1e6, 1e6)


@pytest.fixture(scope="module")
def run() -> Run:
    return record(SPEC, CYCLES, 21, gaps=0.2)


@pytest.fixture(scope="module")
def labs(run: Run) -> pd.DataFrame:
    return late_labs(run, 9, 3, latest=80)[0]


@pytest.fixture(scope="module")
def result(run: Run, labs: pd.DataFrame) -> ReplayResult:
    return softsensor.replay(build_plant_model(SPEC), run.history(), labs, smooth=True)


def table(result: ReplayResult) -> pd.DataFrame:
    assert result.smoothed is not None
    return result.smoothed


def tags_of(spec: UnitSpec) -> list[str]:
    return [item.tag for item in spec.estimates]


def smoothed_in_chunks(
    running: Replay, chunk: int, at_once: int = 100, folder: Path | None = None
) -> tuple[Array, Array]:
    """Smoothed estimates and sd of a replay, with a state kept every ``chunk`` cycles."""
    with SmoothedRun(running.design, folder, chunk) as smoothing:
        for _ in gathered(smoothing.keeping(running.stretches()), at_once):
            pass
        parts = list(smoothing.cycles(running))
    return np.concatenate([part.estimate for part in parts]), np.concatenate([part.sd for part in parts])


def test_it_is_not_there_unless_asked_for(run: Run) -> None:
    assert softsensor.replay(build_plant_model(SPEC), run.history()).smoothed is None


def test_it_has_a_row_for_every_row_of_the_estimates(result: ReplayResult) -> None:
    smoothed = table(result)
    assert list(smoothed.columns) == COLUMNS
    pd.testing.assert_frame_equal(smoothed[["time", "tag"]], result.estimates[["time", "tag"]])
    half = 1.959963984540054 * smoothed["sd"]
    np.testing.assert_array_equal(smoothed["lower"], smoothed["value"] - half)
    np.testing.assert_array_equal(smoothed["upper"], smoothed["value"] + half)


def test_it_leaves_everything_else_as_it_was(run: Run, labs: pd.DataFrame, result: ReplayResult) -> None:
    plain = softsensor.replay(build_plant_model(SPEC), run.history(), labs)
    assert result.summary == plain.summary
    for name in ("estimates", "innovations", "flags", "lab_results"):
        pd.testing.assert_frame_equal(getattr(result, name), getattr(plain, name), check_exact=True)


def test_the_last_cycle_has_what_the_filter_has_to_the_last_bit(result: ReplayResult) -> None:
    last = len(SPEC.estimates)
    for name in ("value", "sd"):
        ours, filtered = table(result)[name].to_numpy()[-last:], result.estimates[name].to_numpy()[-last:]
        assert ours.tobytes() == filtered.tobytes()


@pytest.mark.parametrize("seed", range(1, 9))
def test_the_sd_is_never_larger_than_the_filters(seed: int) -> None:
    spec = random_unit(seed)
    recorded = record(spec, 300, seed, gaps=0.3)
    found = softsensor.replay(
        build_plant_model(spec), recorded.history(), late_labs(recorded, 5, seed, 60)[0], smooth=True
    )
    filtered, smoothed = found.estimates["sd"].to_numpy(), table(found)["sd"].to_numpy()
    assert (smoothed <= filtered * (1.0 + 1e-12)).all()
    assert np.median(smoothed / filtered) < 0.99


@pytest.mark.parametrize("chunk", [1, 7, 64, CYCLES, 5000])
def test_where_states_are_kept_changes_no_bit(run: Run, chunk: int, result: ReplayResult) -> None:
    design, readings = design_of(SPEC), readings_of(run)
    _, rows = late_labs(run, 9, 3, latest=80)
    arrivals = [arrival(SPEC, row) for row in rows]

    def replayed(at: int, at_once: int) -> tuple[Array, Array]:
        return smoothed_in_chunks(Replay(design, parts_of([readings], arrivals)), at, at_once)

    expected, found = replayed(256, 8192), replayed(chunk, 13)
    assert found[0].tobytes() == expected[0].tobytes()
    assert found[1].tobytes() == expected[1].tobytes()
    np.testing.assert_allclose(found[1], by_cycle(table(result), "sd", tags_of(SPEC)), rtol=1e-12)


def test_a_replay_that_begins_at_a_later_cycle_number_gives_the_same(run: Run) -> None:
    """As a replay of records does that begins at a revision's first cycle."""
    design, readings = design_of(SPEC), readings_of(run)
    _, rows = late_labs(run, 9, 3, latest=80)
    arrivals = [arrival(SPEC, row) for row in rows]
    from_zero = smoothed_in_chunks(Replay(design, parts_of([readings], arrivals)), 50)
    later = Replay(design, parts_of([readings], arrivals), first_cycle=640)
    found = smoothed_in_chunks(later, 50)
    assert [lab.status for lab in later.totals.labs] == ["used"] * len(rows)
    assert found[0].tobytes() == from_zero[0].tobytes()
    assert found[1].tobytes() == from_zero[1].tobytes()


def test_results_older_than_what_a_unit_remembers_still_count() -> None:
    """A week is remembered at least; here a sample an hour, a result in the first days, and a fortnight after it."""
    spec = replace(random_unit(1), sample_time=3600.0)
    recorded = record(spec, 520, 5, gaps=0.1)
    frame, rows = late_labs(recorded, 20, 2, latest=30)
    assert min(row.cycle for row in rows) < 520 - 14 * 24
    found = softsensor.replay(build_plant_model(spec), recorded.history(), frame, smooth=True)
    assert set(found.lab_results["status"]) == {"used"}
    value, sd = given_everything(spec, recorded.u, recorded.y, recorded.uncertain, rows)
    np.testing.assert_allclose(by_cycle(table(found), "sd", tags_of(spec)), sd, rtol=1e-8)
    np.testing.assert_allclose(by_cycle(table(found), "value", tags_of(spec)), value, rtol=1e-7)


def test_a_result_of_uncertain_sampling_time_counts_with_the_sd_that_it_was_used_with(run: Run) -> None:
    design, readings = design_of(SPEC), readings_of(run)
    value = float(run.truth[300, len(SPEC.sensors)])
    plain = arrival(SPEC, LabRow(300, 330, 0, value, 0.0))
    doubtful = replace(plain, time_uncertainty=3.0 * SPEC.sample_time)
    running = Replay(design, parts_of([readings], [doubtful]))
    _, sd = smoothed_in_chunks(running, 64)
    (counted,) = running.counted_labs
    lab = SPEC.estimates[0].lab
    assert lab is not None
    assert counted.variance > lab.sd**2
    row = LabRow(300, 330, 0, value, float(np.sqrt(counted.variance)))
    rows = slice(200, 400)
    _, expected = given_everything(SPEC, run.u, run.y, run.uncertain, [row])
    np.testing.assert_allclose(sd[rows], expected[rows], rtol=1e-8)


def test_cycles_can_be_asked_for_twice(run: Run) -> None:
    running = Replay(design_of(SPEC), [(readings_of(run), [])])
    with SmoothedRun(running.design) as smoothing:
        for _ in smoothing.keeping(running.stretches()):
            pass
        first, second = list(smoothing.cycles(running)), list(smoothing.cycles(running))
    assert [len(part.times) for part in first] == [len(part.times) for part in second]
    assert first[0].estimate.tobytes() == second[0].estimate.tobytes()


def test_a_long_silence_is_as_wide_as_the_model_alone_and_leaves_the_information_sound() -> None:
    """20,000 cycles, 18,000 of them without a reading; the disturbance is stationary."""
    spec = three_thermometers()
    recorded = record(spec, 20_000, 9, move=0.3)
    y = recorded.y.copy()
    y[1000:19_000] = np.nan
    readings = readings_of(replace(recorded, y=y))
    _, sd = smoothed_in_chunks(Replay(design_of(spec), [(readings, [])]), 256)
    model = stochastic(spec)
    alone = np.sqrt(model.C[3] @ model.P0 @ model.C[3])
    np.testing.assert_allclose(sd[5000:15_000], alone, rtol=1e-9)
    assert (sd[:900] < 0.5 * alone).all()
    assert (sd[-900:] < 0.5 * alone).all()


@pytest.mark.parametrize("seed", [6, 8, 13])
def test_readings_beyond_the_gate_are_none_for_the_smoother(seed: int) -> None:
    """Those that the dense filter's gate keeps out, with all laboratory results known, are gaps for the joint Gaussian."""
    spec = random_unit(seed)
    recorded = spoilt(record(spec, 120, seed, gaps=0.1), seed)
    design, readings = design_of(spec), readings_of(recorded)
    gates = np.array([item.gate for item in spec.sensors])
    dense = filter_in_order(spec, recorded.u, recorded.y, recorded.uncertain, gate=gates)
    assert np.sum(np.isfinite(recorded.y) & ~dense.used) >= 4
    y = np.where(dense.used, recorded.y, np.nan)
    value, sd = given_everything(spec, recorded.u, y, recorded.uncertain)
    found = smoothed_in_chunks(Replay(design, [(readings, [])]), 37)
    assert np.abs(found[0] - value).max() <= 1e-7 * np.abs(value - value.mean(axis=0)).max()
    np.testing.assert_allclose(found[1], sd, rtol=1e-7)


def block_of(run: Run) -> tuple[Kernel, ScalarReadings]:
    """A run's sensors as the filter takes them, written out anew."""
    kernel = design_of(run.spec).kernel
    at, sensor = np.nonzero(np.isfinite(run.y))
    variance = kernel.r[sensor] * np.where(run.uncertain[at, sensor], 9.0, 1.0)
    return kernel, ScalarReadings(run.u, at, sensor, run.y[at, sensor], variance)


@pytest.mark.parametrize("seed", [2, 6, 11])
def test_the_information_stays_symmetric_to_the_bit_and_not_negative(seed: int) -> None:
    recorded = record(random_unit(seed), 3000, seed, gaps=0.2)
    kernel, data = block_of(recorded)
    state = initial_state(build_plant_model(recorded.spec), kernel)
    trace = empty_trace(3000, len(data.at), kernel)
    assert run_forward(kernel, state, data, trace)
    adjoint = last_adjoint(kernel)
    mean, variance = np.zeros((3000, kernel.n_estimates)), np.zeros((3000, kernel.n_estimates))
    assert run_backward(kernel, data, trace, adjoint, mean, variance)
    np.testing.assert_array_equal(adjoint.N, adjoint.N.T)
    values = np.linalg.eigvalsh(adjoint.N)
    assert values[-1] > 0.0
    assert values[0] >= -1e-12 * values[-1]


def test_arithmetic_that_is_not_sound_is_refused() -> None:
    """A noise variance that makes an innovation's negative; a variance smaller than what later readings take from it."""
    recorded = record(random_unit(6), 50, 6)
    kernel, data = block_of(recorded)
    model = build_plant_model(recorded.spec)
    trace = empty_trace(50, len(data.at), kernel)
    spoilt = data._replace(variance=np.full_like(data.variance, -1e9))
    assert not run_forward(kernel, initial_state(model, kernel), spoilt, trace)
    assert run_forward(kernel, initial_state(model, kernel), data, trace)
    mean, variance = np.zeros((50, kernel.n_estimates)), np.zeros((50, kernel.n_estimates))
    trace.variance[20] *= 1e-3
    assert not run_backward(kernel, data, trace, last_adjoint(kernel), mean, variance)


def test_a_result_that_waits_for_a_person_does_not_count(run: Run) -> None:
    lab = SPEC.estimates[0].lab
    assert lab is not None
    impossible = pd.DataFrame(
        {
            "sampled_at": run.times[[100]],
            "reported_at": run.times[[120]],
            "tag": [lab.tag],
            "value": [run.truth[100, len(SPEC.sensors)] + 1000.0],
        }
    )
    model = build_plant_model(SPEC)
    found = softsensor.replay(model, run.history(), impossible, smooth=True)
    assert list(found.lab_results["status"]) == ["waiting for a person"]
    pd.testing.assert_frame_equal(
        table(found), table(softsensor.replay(model, run.history(), smooth=True)), check_exact=True
    )


def three_thermometers() -> UnitSpec:
    """One disturbance, seen by three sensors alike; a sensor named alone as faulty is left out."""
    sensors = tuple(SensorSpec(f"TI{i}", "degC", 50.0, WIDE, 0.2, 0.8) for i in (1, 2, 3))
    tags = [*(item.tag for item in sensors), "AY1"]
    return UnitSpec(
        "U-3", "three thermometers", 10.0,
        (InputSpec("FI1", "m3/h", 10.0, WIDE),),
        sensors,
        (EstimateSpec("AY1", "mol/L", 1.0, WIDE),),
        (DisturbanceSpec("feed", sd=1.0, time_constant=1800.0),),
        tuple(PathSpec(source, tag, 1.0, (60.0,), dead_time=25.0) for source in ("FI1", "feed") for tag in tags),
        30.0 * 86400.0, leave_out_isolated=True,
    )  # fmt: skip


def test_a_sensor_that_is_left_out_is_left_out_from_its_onset_on() -> None:
    """What the fault had done to the estimate before it was named is gone too."""
    spec = three_thermometers()
    recorded = record(spec, 400, 1, move=0.3)
    y = recorded.y.copy()
    y[200:, 1] += 6.0
    recorded = replace(recorded, y=y)
    running = Replay(design_of(spec), parts_of([readings_of(recorded)], []))
    value, sd = smoothed_in_chunks(running, 64)
    (exclusion,) = running.run.state.book.exclusions
    assert (exclusion.sensor, exclusion.until) == (1, None)
    assert 190 <= exclusion.since <= 202
    y = y.copy()
    y[min(exclusion.since, 200) :, 1] = np.nan  # the gate has kept out the first two
    expected, spread = given_everything(spec, recorded.u, y, recorded.uncertain)
    np.testing.assert_allclose(sd, spread, rtol=1e-8)
    assert np.abs(value - expected).max() <= 1e-8 * np.abs(expected - 1.0).max()


def test_cycles_before_every_input_has_had_a_value_are_empty(run: Run) -> None:
    history = run.history()
    history.loc[:4, SPEC.inputs[0].tag] = np.nan
    smoothed = table(softsensor.replay(build_plant_model(SPEC), history, smooth=True))
    value = by_cycle(smoothed, "value", tags_of(SPEC))
    assert np.isnan(value[:5]).all()
    assert np.isfinite(value[5:]).all()
    later = run.history().iloc[5:]
    whole = table(softsensor.replay(build_plant_model(SPEC), later, smooth=True))
    assert by_cycle(whole, "value", tags_of(SPEC)).tobytes() == value[5:].tobytes()


def test_an_estimate_that_is_known_exactly_has_an_sd_of_zero() -> None:
    """Behind a washout with a dead time nothing of a walk's start arrives: no variance, and no failure by rounding."""
    spec = UnitSpec(
        "U-1", "an estimate behind a washout", 1.0,
        (InputSpec("FI1", "m3/h", 0.0, WIDE),),
        (SensorSpec("TI1", "degC", 0.0, WIDE, 0.1, 0.4),),
        (EstimateSpec("AY1", "mol/L", 0.0, WIDE),),
        (DisturbanceSpec("feed", walk_sd=1.0, initial_sd=0.5),),
        (
            PathSpec("FI1", "TI1", 1.0, (5.0,)),
            PathSpec("feed", "TI1", 1.0, (4.0,)),
            PathSpec("feed", "AY1", dead_time=2.6, numerator=(5.0, 0.0), denominator=(121.0, 11.0, 1.0)),
        ),
        30.0 * 86400.0,
    )  # fmt: skip
    recorded = record(spec, 300, 2, gaps=0.1)
    sd = table(softsensor.replay(build_plant_model(spec), recorded.history(), smooth=True))["sd"].to_numpy()
    assert (sd[:3] <= 1e-12).all()
    assert (sd[4:] > 0.0).all()


def test_what_a_run_saw_is_not_changed(run: Run) -> None:
    readings: CycleReadings = readings_of(run)
    before = [readings.u.copy(), readings.y.copy(), readings.y_quality.copy()]
    arrivals: list[LabArrival] = []
    smoothed_in_chunks(Replay(design_of(SPEC), parts_of([readings], arrivals)), 64)
    for part, kept in zip((readings.u, readings.y, readings.y_quality), before, strict=True):
        assert part.tobytes() == kept.tobytes()
