"""From a model to what a unit runs on: test settings that keep the promise, limits, and refusals."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import softsensor
from plant_models.errors import ModelFileError
from plant_models.library import published_model_path
from softsensor.detection.design_of_tests import CLIP, steady_shifts
from softsensor.detection.run_length import average_run_length
from softsensor.detection.spread import spread_run_length
from softsensor.unit_design import design_unit, load_model

MODELS = ("wood_berry", "quadruple_tank")


@pytest.mark.parametrize("name", MODELS)
def test_all_tests_of_a_sensor_together_keep_the_promised_run_length(name: str) -> None:
    """The noise test has a fiftieth of a sensor's false flags, each pair a third of the rest: at least that run length, from
    the head start too, and within two thousandths of it (intervals are rounded up a little)."""
    model = load_model(published_model_path(name))
    tests = design_unit(model).detection.tests
    promised = model.spec.false_flag_interval / model.spec.sample_time
    each = 3.0 * promised / 0.98
    for k, h in zip(tests.reference.ravel(), tests.interval.ravel(), strict=True):
        achieved = average_run_length(float(k), float(h), head_start=0.5 * float(h), clip=CLIP)
        assert each * (1.0 - 1e-9) <= achieved <= each * 1.002
    noise = 2.0 * spread_run_length(1.5, 1, tests.spread_interval, 2.5)
    assert 50.0 * promised * (1.0 - 1e-4) <= noise <= 50.0 * promised * 1.002


@pytest.mark.parametrize("name", MODELS)
def test_the_slow_reference_value_is_half_the_shift_that_really_remains(name: str) -> None:
    """The fast one looks for three standard deviations, the middle one lies between the two by the same factor."""
    model = load_model(published_model_path(name))
    design = design_unit(model)
    shifts = steady_shifts(model, design.kernel)
    for shift, bank in zip(shifts, design.detection.tests.reference, strict=True):
        half = 0.5 * shift
        slow, middle, fast = bank
        assert slow == (0.5 if half < 0.125 else min(half, 0.75))
        assert fast == 1.5
        assert np.isclose(middle / slow, fast / middle, rtol=1e-12)


def test_readings_beyond_the_failure_limits_are_none() -> None:
    """3.6 mA and 21 mA of 4 to 20 mA (NAMUR NE 43, MEMORY): 2.5 % below and 6.25 % above the range."""
    model = load_model(published_model_path("quadruple_tank"))
    low, high = design_unit(model).limits
    for i, sensor in enumerate(model.spec.sensors):
        bottom, top = sensor.range
        milliampere = (top - bottom) / 16.0
        assert np.isclose(low[i], bottom - 0.4 * milliampere, rtol=1e-12)
        assert np.isclose(high[i], top + 1.0 * milliampere, rtol=1e-12)


def test_designs_of_one_model_are_the_same_bit_for_bit() -> None:
    model = load_model(published_model_path("wood_berry"))
    one, other = design_unit(model), design_unit(model)
    for a, b in zip(one.detection.tests, other.detection.tests, strict=True):
        assert np.asarray(a).tobytes() == np.asarray(b).tobytes()
    assert one.model.digest == load_model(published_model_path("wood_berry")).digest


def test_the_public_function_refuses_with_every_fault(tmp_path: Path) -> None:
    path = tmp_path / "bad.toml"
    path.write_text('[unit]\nname = "X"\ntitle = 3\nsample_time = "10"\n')
    with pytest.raises(ModelFileError) as refused:
        softsensor.load_model(path)
    keys = {fault.key for fault in refused.value.faults}
    assert {"title", "sample_time"} <= keys
    with pytest.raises(ModelFileError):
        softsensor.load_model(tmp_path / "none.toml")


def test_the_package_has_no_other_public_name() -> None:
    with pytest.raises(AttributeError, match="nonsense"):
        softsensor.nonsense  # noqa: B018
