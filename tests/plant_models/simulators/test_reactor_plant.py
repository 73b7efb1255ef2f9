"""The whole plant: repeatable, on the grid, with its story, and hiding the drift as it should."""

from __future__ import annotations

import numpy as np
import pytest

from plant_models.simulators.instruments import SENSOR_FAILURE, FaultSpec
from plant_models.simulators.reactor_plant import INSTRUMENTS, MICROSECONDS, StirredTank
from plant_models.simulators.scenario import (
    HOUR,
    NORMAL_WANDERING,
    DemoScenario,
    Laboratory,
    Move,
    Scenario,
    Swing,
)

START = 1_800_000_000 * MICROSECONDS


def later(hours: float) -> int:
    return START + round(hours * HOUR * MICROSECONDS)


def values(plant: StirredTank, hours: float) -> np.ndarray:
    return np.array([[reading.value for reading in tick] for tick in plant.readings(later(hours))])


def test_same_seed_same_run_to_the_last_bit_however_it_is_cut() -> None:
    scenario = DemoScenario(seed=4).scenario()
    whole = values(StirredTank(scenario, START), 0.5)
    pieces = StirredTank(scenario, START)
    pieces.advance(later(0.1) + 3_700_000)
    pieces.advance(later(0.3))
    rest = [[r.value for r in tick] for tick in pieces.readings(later(0.5))]
    assert whole[108:].tolist() == rest
    other = values(StirredTank(DemoScenario(seed=5).scenario(), START), 0.5)
    assert not np.array_equal(whole, other)


def test_readings_lie_on_the_sample_grid_with_every_tag() -> None:
    ticks = list(StirredTank(Scenario(), START).readings(later(0.05)))
    assert [tick[0].time for tick in ticks] == list(range(START, later(0.05) + 1, 10 * MICROSECONDS))
    assert all([r.tag for r in tick] == [i.tag for i in INSTRUMENTS] for tick in ticks)
    assert {r.status for tick in ticks for r in tick} == {0}


def test_a_quiet_plant_stays_at_its_steady_state() -> None:
    plant = StirredTank(Scenario(automatic=False), START)
    before = plant.tank_state
    plant.advance(later(2.0))
    assert np.allclose(plant.tank_state, before, rtol=1e-9, atol=0.0)


def test_wandering_has_the_variance_it_should() -> None:
    wander = NORMAL_WANDERING[2]
    plant = StirredTank(Scenario(seed=2, wanders=(wander,), automatic=False), START)
    flows = []
    for _ in plant.readings(later(12.0)):
        flows.append(plant.truth.inputs.feed_flow)
    independent = 12.0 * HOUR / (2.0 * wander.time_constant)
    assert np.std(flows) == pytest.approx(wander.sd, rel=3.0 / np.sqrt(2.0 * independent))


def test_the_loop_hides_the_drift_of_the_sensor_it_controls() -> None:
    fault = FaultSpec("TI2101A", "drift", 0.5 * HOUR, rate=1.0)
    plant = StirredTank(Scenario(seed=1, faults=(fault,)), START)
    table = values(plant, 2.5)[-60:].mean(axis=0)
    columns = dict(zip([i.tag for i in INSTRUMENTS], table, strict=True))
    error = columns["TI2101A"] - columns["TI2101B"]
    assert error == pytest.approx(2.0 - 5.0 / 60.0, abs=0.12)
    assert columns["TI2101A"] == pytest.approx(92.4, abs=0.4)
    assert plant.truth.temperature < 91.0
    assert columns["TI2102"] < 78.0


def test_the_feed_concentration_shows_in_the_coolant_and_not_in_the_controlled_temperature() -> None:
    plain, moved = (
        StirredTank(Scenario(seed=1, moves=moves), START)
        for moves in ((), (Move("feed_concentration", 600.0, 0.1),))
    )
    plain.advance(later(4.0))
    moved.advance(later(4.0))
    assert moved.truth.product - plain.truth.product == pytest.approx(0.07, abs=0.01)
    assert moved.truth.inputs.coolant_flow / plain.truth.inputs.coolant_flow > 1.08
    assert moved.truth.temperature == pytest.approx(plain.truth.temperature, abs=0.1)


def test_a_lost_controlled_sensor_leaves_the_coolant_where_it_was() -> None:
    plant = StirredTank(Scenario(seed=1, faults=(FaultSpec("TI2101A", "lost", 600.0),)), START)
    plant.advance(START + 598 * MICROSECONDS)
    before = plant.truth.inputs.coolant_flow
    plant.advance(later(0.5))
    assert plant.truth.inputs.coolant_flow == pytest.approx(before, abs=0.05)
    assert {r.tag: r.status for r in plant.readings_now}["TI2101A"] == SENSOR_FAILURE


def test_fouling_lowers_the_heat_transfer() -> None:
    scenario = Scenario(fouling_per_hour=0.01)
    assert scenario.heat_transfer_share(0.0) == 1.0
    assert scenario.heat_transfer_share(2.0 * HOUR) == pytest.approx(1.0 / 1.02)


def test_swing_rises_stands_and_returns() -> None:
    swing = Swing("feed_concentration", 100.0, 0.2, 50.0, 30.0)
    expected = {100.0: 0.0, 125.0: 0.1, 150.0: 0.2, 180.0: 0.2, 205.0: 0.1, 230.0: 0.0}
    assert {t: pytest.approx(swing.at(t)) for t in expected} == expected


def test_laboratory_is_late_and_mistaken_once() -> None:
    laboratory = Laboratory(mistaken_sample=1, mistake=-1800.0, noise_sd=0.0)
    plant = StirredTank(Scenario(laboratory=laboratory), START)
    plant.advance(later(2.0))
    assert len(plant.lab_results()) == 1
    plant.advance(later(2.5))
    first, second = plant.lab_results()
    assert first.sampled_at == first.taken_at == later(0.5)
    assert second.sampled_at == later(1.0)
    assert second.taken_at == later(1.5)
    assert second.reported_at == later(1.5) + 2400 * MICROSECONDS
    assert first.value == pytest.approx(1.321, abs=1e-3)
    assert plant.lab_results(since=first.reported_at) == (second,)


def test_the_story_is_told_within_the_models_range() -> None:
    story = DemoScenario()
    plant = StirredTank(story.scenario(), START)
    products, errors = [], []
    for tick in plant.readings(later(8.0)):
        products.append(plant.truth.product)
        errors.append({r.tag: r.value for r in tick}["TI2101A"] - plant.truth.temperature)
    mistaken = next(r for r in plant.lab_results() if r.sampled_at != r.taken_at)
    at_label = products[(mistaken.sampled_at - START) // (10 * MICROSECONDS)]
    assert abs(mistaken.value - at_label) > 5.0 * 0.0135
    assert np.abs(np.mean(errors[: 4 * 360])) < 0.05
    assert np.mean(errors[-90:]) == pytest.approx(story.drift_limit, abs=0.15)
    assert 0.1 < max(products) - min(products) < 0.3


def test_sample_time_must_fit_the_step() -> None:
    with pytest.raises(ValueError, match="multiple"):
        StirredTank(Scenario(sample_time=5.0), START)
