"""How the fault tests of a unit are set, so that the promised false-flag interval holds for all tests of a sensor."""

from __future__ import annotations

import numpy as np

from plant_models.plant_model import PlantModel
from softsensor.detection.run_length import interval_with_head_start
from softsensor.detection.signatures import filter_response, steady_filter
from softsensor.detection.spread import gain_and_drift, spread_interval
from softsensor.detection.state_of_tests import NO_PAIR, TestDesign
from softsensor.estimation.kernel import Floats, Kernel

CLIP = 4.0
"""Standardised innovations count up to this size in the sums, so that a spike does not look like a shift."""
SPIKE = 6.0
SETTLED = 20_000
"""Cycles after a bias began at which what it leaves is taken as settled."""
LEAST_REFERENCE, LARGEST_REFERENCE = 0.125, 0.75
GROSS_REFERENCE = 0.5
"""For a sensor whose tolerance-sized bias the filter absorbs (half the shift below LEAST_REFERENCE): its sums then watch
for gross steps only, because a more sensitive test would answer to every small misfit of the model."""
LEAST_PATIENT, LARGEST_PATIENT = 0.01, 0.2
"""Reference values of the patient pair, for the sensors that the model file names."""
FAST_REFERENCE = 1.5
"""Of the fast pair: half of a shift of three standard deviations, which shows in a few cycles and may fade in a few more."""
SPREAD_RATIO, JOINT_RATIO = 1.5, 1.25
"""Noise so many times what it should be is what the noise test and the joint test are made for."""
SPREAD_CLIP = 2.5
"""Differences count up to this size in the noise test: the few large ones of a sudden move are no noise."""
SPREAD_SHARE = 0.02
"""Of a sensor's false flags that its noise test may raise: it finds what it is for nearly as soon, and no diagnosis looks
at its flags."""
INTERVAL_STEP = 2.0**-12
"""Decision intervals are rounded up to this: linear algebra may differ in its last bits between machines, results not."""
LOOK_EVERY = 6
LOST_SECONDS, LOST_CYCLES = 300.0, 10


def steady_shifts(model: PlantModel, kernel: Kernel, window: int = SETTLED) -> Floats:
    """Innovation shift, in its standard deviations, that a tolerance-sized bias of each sensor really leaves in it.

    Taken ``window`` cycles after the bias began, with the filter settled; (n_sensors,).
    """
    use = np.ones(kernel.n_sensors, dtype=np.int64)
    steady = steady_filter(model, kernel, use)
    shifts = np.zeros(kernel.n_sensors)
    for i, sensor in enumerate(model.scaled.sensors):
        signal = np.zeros((window, kernel.n_sensors))
        signal[:, i] = sensor.tolerance
        shifts[i] = abs(filter_response(kernel, steady.gains, use, signal)[-1, i]) / steady.sd[i]
    return shifts


def bank_references(shifts: Floats) -> Floats:
    """Reference values of each sensor's pairs (n_sensors, 3): slow, middle, fast.

    The slow one is half of the settled shift; the middle one the geometric mean of slow and fast.

    >>> bank_references(np.array([0.75, 0.1])).round(3).tolist()
    [[0.375, 0.75, 1.5], [0.5, 0.866, 1.5]]
    """
    half = 0.5 * shifts
    slow = np.where(half < LEAST_REFERENCE, GROSS_REFERENCE, np.minimum(half, LARGEST_REFERENCE))
    middle = np.sqrt(slow * FAST_REFERENCE)
    return np.ascontiguousarray(np.column_stack((slow, middle, np.full(len(slow), FAST_REFERENCE))))


def patient_reference(shift: float) -> float:
    """Reference value of the patient pair: half of the shift that a tolerance-sized bias really leaves, however small.

    >>> patient_reference(0.03), patient_reference(1.2)
    (0.015, 0.2)
    """
    return min(max(0.5 * shift, LEAST_PATIENT), LARGEST_PATIENT)


def _bank(model: PlantModel, shifts: Floats) -> tuple[Floats, Floats]:
    """Reference values and decision intervals (n_sensors, n_pairs) before any widening; a patient pair comes first."""
    reference = bank_references(shifts)
    patient = [tag in model.spec.patient for tag in model.sensor_tags]
    if any(patient):
        own = [
            patient_reference(float(shift)) if has else 1.0
            for shift, has in zip(shifts, patient, strict=True)
        ]
        reference = np.ascontiguousarray(np.column_stack((own, reference)))
    cycles = model.spec.false_flag_interval / model.spec.sample_time
    interval = np.full(reference.shape, NO_PAIR)
    for i, has in enumerate(patient):
        pairs = range(reference.shape[1] - 3 - has, reference.shape[1]) if any(patient) else range(3)
        each = cycles * len(pairs) / (1.0 - SPREAD_SHARE)
        for p in pairs:
            interval[i, p] = interval_with_head_start(float(reference[i, p]), each, CLIP)
    return reference, interval


def fault_test_design(model: PlantModel, kernel: Kernel) -> TestDesign:
    """Reference values from the shifts that tolerance-sized biases leave; intervals solved for the promised run length.

    The promise holds for all tests of a sensor together: the noise test has SPREAD_SHARE of the false flags, each pair an
    equal part of the rest. The joint test has the promise to itself. A sensor's intervals are as much wider as
    commissioning found that its innovations need.
    """
    cycles = model.spec.false_flag_interval / model.spec.sample_time
    reference, exact = _bank(model, steady_shifts(model, kernel))
    factors, disarmed = dict(model.spec.widening), dict(model.spec.disarmed)
    wider = np.array([[factors.get(tag, 1.0)] for tag in model.sensor_tags])
    interval = np.ceil(exact * wider / INTERVAL_STEP) * INTERVAL_STEP
    lost = max(LOST_CYCLES, int(np.ceil(LOST_SECONDS / model.spec.sample_time)))
    joint_gain, joint_drift = gain_and_drift(JOINT_RATIO)
    return TestDesign(
        reference,
        interval,
        CLIP,
        SPREAD_CLIP,
        *gain_and_drift(SPREAD_RATIO),
        _rounded_up(spread_interval(SPREAD_RATIO, 1, 0.5 * cycles / SPREAD_SHARE, SPREAD_CLIP)),
        joint_gain,
        joint_drift * kernel.n_sensors,
        _rounded_up(spread_interval(JOINT_RATIO, kernel.n_sensors, cycles)),
        SPIKE,
        np.full(kernel.n_sensors, lost, dtype=np.int64),
        0.01 / cycles,
        np.array([item.noise_sd for item in model.scaled.sensors]),
        LOOK_EVERY,
        np.array([int(tag not in disarmed) for tag in model.sensor_tags], dtype=np.int64),
        0,
    )


def _rounded_up(interval: float) -> float:
    return float(np.ceil(interval / INTERVAL_STEP) * INTERVAL_STEP)
