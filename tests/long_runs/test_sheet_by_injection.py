"""The detectability sheet against faults put into simulated plants and run through the program's own cycle."""

from __future__ import annotations

import math
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
from long_runs.found import put_in
from long_runs.simulated_plant import Case, Plant, seen_by, still_inputs

from plant_models.simulators import reactor_model_path
from softsensor.detection.detectability import FOUND, HORIZONS
from softsensor.detection.sheet import detectability_sheet
from softsensor.detection.signatures import Shape
from softsensor.unit_design import design_unit, load_model

WOOD_BERRY = Path(str(files("plant_models.library"))) / "wood_berry.toml"


@pytest.mark.parametrize("shape", ["step", "ramp"])
def test_a_fault_of_the_size_on_the_sheet_is_found_in_time(shape: Shape) -> None:
    """Within 8 h; 90 % within the error of the runs, and a few more, because every sum of the bank looks."""
    design = design_unit(load_model(WOOD_BERRY))
    (line,) = detectability_sheet(design.detection).sensors
    size = (line.found.steps if shape == "step" else line.found.ramps)[1]
    assert size is not None
    cycles = int(HORIZONS[1] / design.model.spec.sample_time)
    runs = put_in(design, (0, shape, size), (400, cycles), 150)
    share = float(np.mean([up for up, _ in runs]))
    error = 3.0 * math.sqrt(FOUND * (1.0 - FOUND) / len(runs))
    assert len(runs) > 140
    assert FOUND - error < share <= min(1.0, FOUND + error + 0.04)
    smaller = put_in(design, (0, shape, 0.7 * size), (400, cycles), 60)
    assert float(np.mean([up for up, _ in smaller])) < FOUND - 0.1


def test_a_fault_that_is_named_alone_on_the_sheet_is_so_in_the_program() -> None:
    design = design_unit(load_model(reactor_model_path()))
    lines = detectability_sheet(design.detection).sensors
    for index in (0, 2):
        step = next(fault for fault in lines[index].told if fault.shape == "step")
        assert step.named > 0.97
        tag = lines[index].shift.tag
        runs = put_in(design, (index, "step", step.size), (2500, 120), 20)
        assert len(runs) >= 19
        named = [any(flag.group == (tag,) for flag in opened) for _, opened in runs]
        assert sum(named) >= len(named) - 1


def test_an_inputs_own_instrument_is_found_through_the_sensors() -> None:
    """By any of the sensors, so that more than 90 % may be found; of smaller errors clearly less."""
    design = design_unit(load_model(WOOD_BERRY))
    spec, line = design.model.spec, detectability_sheet(design.detection).inputs[0]
    cycles, before, runs = int(HORIZONS[0] / spec.sample_time), 300, 120
    size = line.found.steps[0]
    assert size is not None
    shares = []
    for factor in (1.0, 0.7):
        error = np.zeros((before + cycles, len(spec.inputs)))
        error[before:, 0] = factor * size
        plant, ups = Plant(spec, 43), []
        for _ in range(runs):
            case = Case(still_inputs(spec, before + cycles), input_bias=error)
            seen = seen_by(design, case, plant.readings(case)[1], keep=True)
            top = np.concatenate([np.maximum(part.high, part.low).max(axis=1) for part in seen.parts])
            if top[before - 1] < 1.0:
                ups.append(bool(np.any(top[before:] > 1.0)))
        shares.append(float(np.mean(ups)))
    assert shares[0] > FOUND - 3.0 * math.sqrt(FOUND * (1.0 - FOUND) / runs)
    assert shares[1] < shares[0] - 0.1
