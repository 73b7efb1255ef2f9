"""Faults put into simulated readings of a unit, and what the tests and the diagnosis make of them, cycle by cycle."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.plant_model import PlantModel
from softsensor.cycle import UnitDesign
from softsensor.detection.flags import Flag, Note
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.replay import Replay
from softsensor.unit_design import design_unit

STEP = 10_000_000
Array = NDArray[np.float64]

SENSOR = """
[[sensor]]
tag = "{tag}"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15
tolerance = 0.6

[[transfer_function]]
from = "FI1"
to = "{tag}"
gain = -1.9
time_constants = ["4.2 min"]

[[transfer_function]]
from = "feed concentration"
to = "{tag}"
gain = {gain}
time_constants = ["{lag}"]
"""
MODEL = (
    """
[unit]
name = "R-1"
title = "A reactor"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]

[[disturbance]]
name = "feed concentration"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "feed concentration"
to = "AY1"
gain = 0.9
time_constants = ["10 min"]
"""
    + SENSOR.format(tag="TI1A", gain=14.0, lag="8 min")
    + SENSOR.format(tag="TI1B", gain=14.0, lag="8 min")
    + SENSOR.format(tag="TI2", gain=9.0, lag="3 min")
)


@dataclass
class Told:
    """What a run of readings brought: each flag's states in order, notes, events."""

    flags: list[Flag]
    notes: list[Note]
    used: list[NDArray[np.int8]]

    def opened(self) -> list[tuple[str, str]]:
        return [(flag.tag, flag.kind) for flag in self.flags if flag.cleared is None]


@pytest.fixture(scope="module")
def model() -> PlantModel:
    return build_plant_model(parse_model_text(MODEL, "r1.toml"))


@pytest.fixture(scope="module")
def design(model: PlantModel) -> UnitDesign:
    return design_unit(model)


@pytest.fixture(scope="module")
def leaving_out() -> UnitDesign:
    """The same unit, where a sensor that is named alone is left out."""
    text = MODEL + "\n[fault_tests]\nleave_out_isolated = true\n"
    return design_unit(build_plant_model(parse_model_text(text, "r1.toml")))


def readings(model: PlantModel, cycles: int, seed: int, swing: Array | None = None) -> Array:
    """(cycles, 3) readings of the sensors, the disturbance drawn (or ``swing`` added to its value), noise in them."""
    random = np.random.default_rng(seed)
    part = model.stochastic
    x = np.linalg.cholesky(part.P0 + 1e-18 * np.eye(len(part.q))) @ random.standard_normal(len(part.q))
    out = np.full((cycles, 3), 92.4)
    for k in range(cycles):
        out[k] += (part.C @ x)[:3]
        x = part.A @ x + np.sqrt(part.q) * random.standard_normal(len(part.q))
        if swing is not None:
            x[part.disturbance_index[0]] += swing[k]
    return out + 0.15 * random.standard_normal((cycles, 3))


def told(design: UnitDesign, y: Array) -> Told:
    n = len(y)
    quality = np.where(np.isfinite(y), 0, 3).astype(np.int8)
    cycles = CycleReadings(
        STEP * np.arange(n, dtype=np.int64),
        np.full((n, 1), 11.5),
        np.zeros((n, 1), dtype=np.int8),
        np.ascontiguousarray(y),
        quality,
    )
    run = Replay(design, [(cycles, [])])
    found = Told([], [], [])
    for stretch in run.stretches():
        found.flags += stretch.results.flags
        found.notes += stretch.results.notes
        found.used.append(stretch.results.used)
    return found


def test_no_flag_without_a_fault(design: UnitDesign, model: PlantModel) -> None:
    assert told(design, readings(model, 4000, 1)).flags == []


def test_a_bias_is_one_flag_that_clears_when_it_has_gone_and_stays_on_record(
    design: UnitDesign, model: PlantModel
) -> None:
    y = readings(model, 3500, 2)
    y[1000:1800, 0] += 1.2
    found = told(design, y)
    flag, cleared = found.flags
    assert (flag.tag, flag.kind, flag.group) == ("TI1A", "bias", ("TI1A",))
    assert abs(flag.onset - 1000 * STEP) <= 10 * STEP
    assert 1000 * STEP < flag.detected < 1060 * STEP
    assert abs(flag.size - 1.2) < 4.0 * flag.size_sd
    assert flag.probability > 10.0 / 11.0
    assert cleared.flag == flag.flag
    assert cleared.cleared is not None
    assert cleared.cleared > 1800 * STEP
    assert (cleared.onset, cleared.size, cleared.group) == (flag.onset, flag.size, flag.group)


def test_a_drift_is_named_with_its_onset(leaving_out: UnitDesign, model: PlantModel) -> None:
    y = readings(model, 2500, 3)
    y[1000:, 1] += 2.5 * np.arange(1500) / 360.0
    found = told(leaving_out, y)
    flag = found.flags[0]
    assert (flag.tag, flag.group) == ("TI1B", ("TI1B",))
    assert abs(flag.onset - 1000 * STEP) < 180 * STEP  # half an hour
    error = 2.5 * (flag.detected / STEP - 1000) / 360.0
    assert error < 3.0 * 0.6
    assert found.opened() == [("TI1B", flag.kind)]


@pytest.mark.parametrize("by_itself", [False, True])
def test_a_sensor_that_heals_comes_back_by_itself_only_where_the_file_says_so(
    model: PlantModel, by_itself: bool
) -> None:
    text = MODEL + f"\n[fault_tests]\nleave_out_isolated = true\nback_by_itself = {str(by_itself).lower()}\n"
    design = design_unit(build_plant_model(parse_model_text(text, "r1.toml")))
    y = readings(model, 3000, 2)
    y[1000:1500, 1] += 2.5
    found = told(design, y)
    used = np.concatenate(found.used)[:, 1]
    assert found.opened() == [("TI1B", "bias")]
    (cleared,) = [flag.cleared // STEP for flag in found.flags if flag.cleared is not None]
    assert 1860 < cleared < 2600
    assert not used[1100 : cleared + 1].any()
    assert used[cleared + 1 :].all() == by_itself
    lines = [note.text for note in found.notes if note.kind == "put back"]
    assert any("as the model file allows" in line for line in lines) == by_itself


@pytest.mark.parametrize("size", [0.3, 1.0, 2.0])
def test_a_disturbance_s_step_is_no_flag(design: UnitDesign, model: PlantModel, size: float) -> None:
    """Up to 25 of its standard deviations at once."""
    swing = np.zeros(2500)
    swing[1500] = size
    assert told(design, readings(model, 2500, 4, swing)).flags == []


def test_a_disturbance_that_keeps_a_test_up_is_an_event_and_no_flag(
    design: UnitDesign, model: PlantModel
) -> None:
    swing = np.zeros(2500)
    swing[1500:2000] = 0.02
    found = told(design, readings(model, 2500, 4, swing))
    assert found.flags == []
    assert any("feed concentration" in note.text for note in found.notes), found.notes


def test_a_frozen_sensor_is_stuck_and_moves_on(design: UnitDesign, model: PlantModel) -> None:
    y = readings(model, 1500, 5)
    y[600:700, 2] = y[599, 2]
    found = told(design, y)
    stuck = [flag for flag in found.flags if flag.kind == "stuck"]
    assert [flag.tag for flag in stuck] == ["TI2", "TI2"]
    assert abs(stuck[0].onset - 599 * STEP) <= STEP
    assert stuck[0].detected < 640 * STEP
    assert stuck[1].cleared == 700 * STEP


@pytest.mark.parametrize("resolution", [0.05, 0.15, 0.3])
def test_coarse_steps_are_no_stuck_sensor(design: UnitDesign, model: PlantModel, resolution: float) -> None:
    """A resolution of up to twice the noise repeats a value for many cycles, honestly."""
    y = np.round(readings(model, 4000, 6) / resolution) * resolution
    assert [flag for flag in told(design, y).flags if flag.kind == "stuck"] == []


def test_honest_repeats_now_and_then_are_no_stuck_sensor(design: UnitDesign, model: PlantModel) -> None:
    """A transmitter that renews its value every third cycle: two repeats after each new one."""
    y = readings(model, 3000, 7)
    y[:, 0] = np.repeat(y[::3, 0], 3)
    assert [flag for flag in told(design, y).flags if flag.kind == "stuck"] == []


def test_a_sensor_without_readings_is_lost_until_it_comes_back(design: UnitDesign, model: PlantModel) -> None:
    y = readings(model, 800, 8)
    y[300:325, 0] = np.nan  # not yet: 300 s and ten cycles are waited for
    y[500:560, 0] = np.nan
    lost, back = told(design, y).flags
    assert (lost.tag, lost.kind, lost.cleared) == ("TI1A", "lost", None)
    assert lost.onset == 500 * STEP
    assert lost.detected == 530 * STEP
    assert (back.flag, back.cleared) == (lost.flag, 560 * STEP)


def test_a_value_beyond_what_the_instrument_can_show_is_no_reading(
    design: UnitDesign, model: PlantModel
) -> None:
    y = readings(model, 700, 9)
    y[500:560, 2] = 250.0
    assert told(design, y).opened() == [("TI2", "lost")]


@pytest.mark.parametrize("size", [1.5, -3.0, 4.0])
def test_a_spike_is_its_own_kind_and_no_shift(design: UnitDesign, model: PlantModel, size: float) -> None:
    y = readings(model, 1500, 10)
    y[500, 1] += size
    found = told(design, y)
    assert found.opened() == [("TI1B", "spike")]
    assert found.flags[0].onset == 500 * STEP


def test_two_faults_are_two_flags(leaving_out: UnitDesign, model: PlantModel) -> None:
    y = readings(model, 2000, 11)
    y[600:, 0] += 1.2
    y[1200:1260, 2] = np.nan
    assert sorted(told(leaving_out, y).opened()) == [("TI1A", "bias"), ("TI2", "lost")]


def test_the_same_readings_tell_the_same(design: UnitDesign, model: PlantModel) -> None:
    y = readings(model, 1500, 12)
    y[700:, 0] -= 1.0
    one, other = told(design, y), told(design_unit(model), y)
    assert one.flags == other.flags
    assert one.notes == other.notes
