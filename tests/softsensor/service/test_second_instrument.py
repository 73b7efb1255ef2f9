"""A second instrument beside a sensor: the model it makes, and what it mends."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from plant_models.building import build_plant_model
from plant_models.second_instrument import with_second
from plant_models.simulators import reactor_model_path
from softsensor.detection.sheet import detectability_sheet
from softsensor.service.second_instrument import mends
from softsensor.unit_design import design_unit, load_model

LIBRARY = Path(str(files("plant_models.library")))


def test_the_second_instrument_reads_what_the_first_reads() -> None:
    model = load_model(LIBRARY / "heavy_oil_fractionator.toml")
    larger = build_plant_model(with_second(model.spec, 2))
    assert larger.spec.sensors[-1].noise_sd == model.spec.sensors[2].noise_sd
    x = np.zeros(larger.stochastic.A.shape[0])
    x[list(larger.stochastic.disturbance_index)] = (1.0, -0.4)
    for _ in range(60):
        x = larger.stochastic.A @ x
        row = larger.stochastic.C @ x
        assert row[5] == pytest.approx(row[2], rel=1e-12, abs=1e-15)
    assert abs(row[2]) > 0.01
    assert len(model.stochastic.C) + 1 == len(larger.stochastic.C)


def test_beside_the_only_sensor_the_fault_is_found_but_not_which_of_the_two() -> None:
    model = load_model(LIBRARY / "wood_berry.toml")
    lines = detectability_sheet(design_unit(model).detection).sensors
    assert lines[0].absorbed
    (mend,) = mends(model, lines)
    assert (mend.tag, mend.beside, mend.whole) == ("AI4101", "AI4101", False)
    assert mend.then is not None
    assert not mend.then.absorbed
    assert mend.then.found.steps[2] < 0.5 * lines[0].found.steps[2]
    assert {name for fault in mend.then.told for name, _ in fault.alike} == {"a second AI4101"}


def test_a_second_jacket_thermometer_mends_the_reactor() -> None:
    model = load_model(reactor_model_path())
    lines = detectability_sheet(design_unit(model).detection).sensors
    assert [line.absorbed for line in lines] == [False, False, True]
    (mend,) = mends(model, lines)
    assert (mend.tag, mend.beside) == ("TI2102", "TI2102")
    assert mend.then is not None
    assert not mend.then.absorbed


def test_where_nothing_ails_nothing_is_added() -> None:
    model = load_model(LIBRARY / "heavy_oil_fractionator.toml")
    assert mends(model, detectability_sheet(design_unit(model).detection).sensors) == ()
