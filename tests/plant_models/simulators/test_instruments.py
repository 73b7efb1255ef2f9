"""Instruments and the faults put on their readings."""

from __future__ import annotations

import math

import numpy as np
import pytest

from plant_models.simulators.control import Controller, ControllerState, control
from plant_models.simulators.instruments import (
    RANGE_EXCEEDED,
    SENSOR_FAILURE,
    FaultSpec,
    Instrument,
    Measured,
    follow,
    measure,
)

THERMOMETER = Instrument("TI1", "degC", (0.0, 100.0), 0.2, 0.05, 20.0)
BEFORE = Measured(50.0, 49.95, 0)


def shown(fault: FaultSpec | None, seconds: float, true: float = 50.0, normal: float = 0.0) -> Measured:
    faults = () if fault is None else (fault,)
    return measure(THERMOMETER, faults, BEFORE, true, seconds, (normal, normal), 10.0)


def test_noise_and_resolution() -> None:
    assert shown(None, 0.0, 50.0, 1.0).shown == pytest.approx(50.2)
    values = [shown(None, 0.0, 50.0, float(z)).shown for z in np.random.default_rng(1).standard_normal(4000)]
    assert np.std(values) == pytest.approx(math.hypot(0.2, 0.05 / math.sqrt(12.0)), rel=0.04)
    assert np.abs(np.array(values) / 0.05 - np.round(np.array(values) / 0.05)).max() < 1e-6


def test_lag_is_exact_however_the_time_is_cut() -> None:
    once = follow(THERMOMETER, 50.0, 60.0, 30.0)
    twice = follow(THERMOMETER, follow(THERMOMETER, 50.0, 60.0, 11.0), 60.0, 19.0)
    assert once == pytest.approx(60.0 - 10.0 * math.exp(-1.5), rel=1e-14)
    assert twice == pytest.approx(once, rel=1e-14)


@pytest.mark.parametrize(
    ("fault", "seconds", "expected"),
    [
        (FaultSpec("TI1", "bias", 100.0, size=1.5), 99.0, 50.0),
        (FaultSpec("TI1", "bias", 100.0, size=1.5), 100.0, 51.5),
        (FaultSpec("TI1", "bias", 100.0, size=1.5, end=200.0), 200.0, 50.0),
        (FaultSpec("TI1", "drift", 3600.0, rate=1.2), 3600.0 + 5400.0, 51.8),
        (FaultSpec("TI1", "drift", 3600.0, size=1.0, rate=-1.2), 3600.0 + 5400.0, 49.0),
        (FaultSpec("TI1", "stuck", 100.0), 500.0, 49.95),
        (FaultSpec("TI1", "spike", 100.0, size=7.0, rate=6.0), 705.0, 57.0),
        (FaultSpec("TI1", "spike", 100.0, size=7.0, rate=6.0), 712.0, 50.0),
        (FaultSpec("TI2", "bias", 100.0, size=1.5), 100.0, 50.0),
    ],
)
def test_faults_on_the_reading(fault: FaultSpec, seconds: float, expected: float) -> None:
    assert shown(fault, seconds).shown == pytest.approx(expected)


def test_a_noisy_instrument_adds_its_noise() -> None:
    assert shown(FaultSpec("TI1", "noisy", 0.0, size=0.5), 1.0, normal=2.0).shown == pytest.approx(51.4)


def test_a_lost_sensor_is_bad_without_a_value() -> None:
    lost = shown(FaultSpec("TI1", "lost", 0.0), 1.0)
    assert math.isnan(lost.shown)
    assert lost.status == SENSOR_FAILURE == 0x808C0000
    after = measure(THERMOMETER, (FaultSpec("TI1", "stuck", 0.0),), lost, 50.0, 2.0, (0.0, 0.0), 10.0)
    assert after.shown == pytest.approx(50.0)


@pytest.mark.parametrize(("true", "end", "bits"), [(-3.0, 0.0, 0b01), (120.0, 100.0, 0b10)])
def test_out_of_range_is_uncertain_with_limit_bits(true: float, end: float, bits: int) -> None:
    measured = shown(None, 0.0, true)
    assert measured.shown == end
    assert measured.status & 0xFFFF0000 == RANGE_EXCEEDED
    assert (measured.status >> 10) & 0b11 == 1
    assert (measured.status >> 8) & 0b11 == bits


def test_impossible_faults_are_refused() -> None:
    with pytest.raises(ValueError, match="rate"):
        FaultSpec("TI1", "spike", 0.0, size=1.0)
    with pytest.raises(ValueError, match="ends after"):
        FaultSpec("TI1", "bias", 10.0, size=1.0, end=10.0)


def test_controller_is_proportional_and_integral_and_stands_without_a_measurement() -> None:
    controller = Controller(gain=2.0, integral_time=100.0, filter_time=1e-3, output_range=(0.0, 10.0))
    state = ControllerState(50.0, 5.0)
    first = control(controller, state, 51.0, 50.0, 2.0)
    assert first.output == pytest.approx(5.0 + 2.0 * (1.0 + 2.0 / 100.0))
    second = control(controller, first, 51.0, 50.0, 2.0)
    assert second.output - first.output == pytest.approx(2.0 * 2.0 / 100.0)
    assert control(controller, second, math.nan, 50.0, 2.0) == second
    assert control(controller, second, 90.0, 50.0, 2.0).output == 10.0
