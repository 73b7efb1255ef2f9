"""The gate: a single impossible reading moves nothing, a lasting move is followed, and going back comes to the same bits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from benchmarks.measuring import small_unit
from independent.dense_filter import LabRow
from independent.random_models import random_unit
from independent.recorded_runs import Run, record, spoilt
from independent.replaying import arrival, readings_of, replay_in_parts
from independent.transfer_paths import Array

import softsensor
from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.plant_model import PlantModel
from plant_models.simulators import reactor_model_path
from softsensor.cycle import UnitDesign
from softsensor.cycle_results import CycleResults, join_results
from softsensor.detection.flags import Flag
from softsensor.detection.people import ACTS, Decision
from softsensor.estimation.gate import gates_open, passes
from softsensor.service.replay import Replay
from softsensor.service.unit_run import slice_readings
from softsensor.unit_design import design_unit

AT, CYCLES = 700, 1200
REACTOR, FRACTIONATOR = str(reactor_model_path()), str(published_model_path("heavy_oil_fractionator"))


def through(scores: list[float], gate: float = 8.0) -> list[bool]:
    """One sensor's standardised innovations through its gate, one after the other."""
    streak, used = np.zeros(1, dtype=np.int64), []
    for score in scores:
        every = gates_open(streak)
        used.append(bool(passes(np.array([gate]), streak, 0, 2.0 * score, 2.0)) or every)
    return used


@pytest.mark.parametrize(
    ("scores", "kept_out"),
    [
        ([0.0, 50.0, 0.0, -50.0, 0.0], [1, 3]),
        ([0.0, 8.0, -8.0, 8.001, 0.0], [3]),
        ([0.0, 50.0, 50.0, 0.0, 50.0, 50.0, 50.0], [1, 2, 4, 5]),
        ([0.0, 50.0, 50.0, 50.0, 50.0, 9.0, 5.0, 9.0], [1, 2]),
        ([50.0, -50.0, 50.0, -50.0, 50.0, -50.0], [0, 1, 2, 3, 4, 5]),
        ([5.0, 5.0, 50.0], []),
        ([5.0, 3.0, 50.0], [2]),
        ([50.0] * 9 + [1.0, 50.0, 0.0, -50.0], [0, 1, 10, 12]),
        ([50.0] * 9 + [-50.0, -50.0, -50.0], [0, 1, 9, 10]),
    ],
)
def test_a_reading_is_kept_out_until_a_row_of_three(scores: list[float], kept_out: list[int]) -> None:
    """Worked out by hand from the rule in the handbook's chapter 4; the numbers are of those kept out."""
    assert [k for k, used in enumerate(through(scores)) if not used] == kept_out
    mirrored = through([-score for score in scores])
    assert mirrored == through(scores)


def test_a_unit_of_its_own_gate() -> None:
    assert through([3.1, 0.0], gate=3.0) == [False, True]
    assert through([49.0, 0.0], gate=50.0) == [True, True]


def test_what_is_not_a_number_is_left_to_the_correction_which_refuses_it() -> None:
    assert through([float("nan")]) == [True]


def drawn(model: PlantModel, seed: int, cycles: int = CYCLES) -> Run:
    """A run of the model's own noise without gaps, no reading Uncertain."""
    run = record(model.spec, cycles, seed, move=0.02)
    rng, n = np.random.default_rng([6, seed]), len(model.spec.sensors)
    noise = np.array([item.noise_sd for item in model.spec.sensors])
    y = run.truth[:, :n] + noise * rng.standard_normal((cycles, n))
    return replace(run, y=y, uncertain=np.zeros_like(run.uncertain))


def replayed(design: UnitDesign, run: Run) -> CycleResults:
    return join_results([stretch.results for stretch in Replay(design, [(readings_of(run), [])]).stretches()])


def told(results: CycleResults) -> list[tuple[str, str]]:
    """Flags opened: tag and kind, each once."""
    names: dict[str, Flag] = {flag.flag: flag for flag in results.flags}
    return [(flag.tag, flag.kind) for flag in names.values()]


@pytest.fixture(scope="module", params=[REACTOR, FRACTIONATOR], ids=["reactor", "fractionator"])
def design(request: pytest.FixtureRequest) -> UnitDesign:
    return design_unit(softsensor.load_model(request.param))


@pytest.mark.parametrize("seed", [1, 2])
def test_a_spike_is_one_spike_flag_and_moves_the_estimate_by_nothing(design: UnitDesign, seed: int) -> None:
    run = drawn(design.model, seed)
    quiet = replayed(design, run)
    for i, tag in enumerate(design.model.sensor_tags):
        jumped, gone = run.y.copy(), run.y.copy()
        jumped[AT, i] += 50.0 * quiet.innovation_sd[AT, i]
        gone[AT, i] = np.nan
        with_spike = replayed(design, replace(run, y=jumped))
        without = replayed(design, replace(run, y=gone))
        for name in ("estimate", "sd", "predicted", "innovation_sd", "used"):
            assert getattr(with_spike, name).tobytes() == getattr(without, name).tobytes(), name
        assert with_spike.innovation[AT, i] > 40.0 * with_spike.innovation_sd[AT, i]
        assert [name for name in told(with_spike) if name not in told(quiet)] == [(tag, "spike")]


@pytest.mark.parametrize("size", [15.0, 30.0, -30.0, 100.0])
def test_a_step_is_followed_after_three_cycles_and_named(design: UnitDesign, size: float) -> None:
    run = drawn(design.model, 3)
    quiet = replayed(design, run)
    for i, tag in enumerate(design.model.sensor_tags):
        y = run.y.copy()
        y[AT:, i] += size * quiet.innovation_sd[AT, i]
        found = replayed(design, replace(run, y=y))
        assert found.used[AT - 1 : AT + 3, i].tolist() == [1, 0, 0, 1]
        others = np.delete(np.arange(len(run.y[0])), i)
        assert found.used[: AT + 6, others].all()
        assert told(found) == [(tag, "bias")]
        flag = found.flags[0]
        assert 0 <= flag.detected - int(found.times[AT]) <= 8 * design.detection.sample_us
        assert abs(flag.onset - int(found.times[AT])) <= 2 * design.detection.sample_us


@pytest.mark.parametrize("size", [12.0, 50.0, -400.0])
def test_two_impossible_readings_in_a_row_move_nothing_and_are_no_bias(
    design: UnitDesign, size: float
) -> None:
    run = drawn(design.model, 5)
    quiet = replayed(design, run)
    for i in range(len(design.model.sensor_tags)):
        jumped, gone = run.y.copy(), run.y.copy()
        jumped[AT : AT + 2, i] += size * quiet.innovation_sd[AT, i]
        gone[AT : AT + 2, i] = np.nan
        found, without = replayed(design, replace(run, y=jumped)), replayed(design, replace(run, y=gone))
        assert found.estimate.tobytes() == without.estimate.tobytes()
        assert [name for name in told(found) if name[1] != "spike"] == told(without)


def test_data_of_a_right_model_never_meet_the_gate(design: UnitDesign) -> None:
    run = drawn(design.model, 4, 20_000)
    found = replayed(design, run)
    np.testing.assert_array_equal(found.used == 1, np.isfinite(found.innovation))
    score = np.abs(found.innovation / found.innovation_sd)
    assert np.isfinite(score).mean() > 0.9
    assert np.nanmax(score) < 6.0


@pytest.mark.parametrize("seed", [3, 6, 8, 13])
def test_how_cycles_are_cut_changes_nothing_with_spikes_steps_and_late_results(seed: int) -> None:
    """Blocks of one cycle, cuts within rows, and back and forward again across rows."""
    spec = random_unit(seed)
    run, design = spoilt(record(spec, 200, seed, 0.15), seed), design_unit(build_plant_model(spec))
    readings, n = readings_of(run), len(spec.sensors)
    labs = [
        LabRow(cycle, known, 0, float(run.truth[cycle, n]), lab.sd)
        for cycle, known in ((20, 90), (100, 140), (60, 180))
        if (lab := spec.estimates[0].lab) is not None
    ]
    arrivals = [arrival(spec, lab) for lab in labs]
    whole = replay_in_parts(design, readings, arrivals)
    for cuts in (range(200), (1, 63, 64, 65, 100, 101), (7, 77, 133)):
        cut = replay_in_parts(design, readings, arrivals, tuple(cuts))
        assert cut.digest == whole.digest
        assert cut.estimate.tobytes() == whole.estimate.tobytes()
        assert cut.P.tobytes() == whole.P.tobytes()
    found = join_results([stretch.results for stretch in Replay(design, [(readings, [])]).stretches()])
    assert not found.used[np.isfinite(found.innovation)].all()


def test_the_noise_of_an_uncertain_reading_counts_in_its_gate() -> None:
    """12 sd of a Good reading are 4 of an Uncertain one: used."""
    spec = small_unit(1, 2, 10.0)
    model = build_plant_model(spec)
    design, run = design_unit(model), drawn(model, 5, 400)
    sd = replayed(design, run).innovation_sd[300, 0]
    y, doubt = run.y.copy(), run.uncertain.copy()
    y[300, 0] += 12.0 * sd
    assert replayed(design, replace(run, y=y)).used[300, 0] == 0
    doubt[300, 0] = True
    assert replayed(design, replace(run, y=y, uncertain=doubt)).used[300, 0] == 1


def test_a_sensor_that_a_person_has_left_out_neither_counts_nor_breaks_a_row() -> None:
    """Kept out for 20 cycles in the middle of a row of impossible readings: its third reading in use is followed."""
    model = build_plant_model(small_unit(1, 2, 10.0))
    design, run = design_unit(model), drawn(model, 6, 400)
    sd = replayed(design, run).innovation_sd[300, 0]
    y = run.y.copy()
    y[300:, 0] += 20.0 * sd
    readings = readings_of(replace(run, y=y))
    act = next(item for item in ACTS if item == "leave out")
    leave_out = Decision(1, act, "TI0", "", "", 200.0, "someone", "work on it")
    parts = [(slice_readings(readings, 0, 302), []), (slice_readings(readings, 302, 400), [leave_out])]
    found = join_results([stretch.results for stretch in Replay(design, parts).stretches()])
    assert found.used[299:302, 0].tolist() == [1, 0, 0]
    assert not found.used[302:322, 0].any()
    assert found.left_out[302:322, 0].all()
    assert found.used[322:, 0].all()


def innovations_of(y: Array) -> int:
    return int(np.isfinite(y).sum())


def test_the_summary_counts_readings_that_were_used() -> None:
    model = build_plant_model(small_unit(1, 2, 10.0))
    run = drawn(model, 7, 300)
    y = run.y.copy()
    y[[50, 120, 200], 1] += 1000.0
    result = softsensor.replay(model, replace(run, y=y).history())
    assert result.summary["sensors"]["TI1"]["readings"] == innovations_of(y[:, 1]) - 3
    assert result.summary["sensors"]["TI1"]["nis"] < 1.5
    kept_out = result.innovations[result.innovations["used"] == 0]
    assert kept_out["tag"].tolist() == ["TI1"] * 3
    assert (kept_out["innovation"] > 990.0).all()
