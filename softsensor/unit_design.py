"""From a plant model to everything one unit runs on: kernel, test settings that keep the promise, suspects."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from plant_models.building import build_plant_model
from plant_models.model_file import read_model_file
from plant_models.plant_model import PlantModel
from softsensor.cycle import BEYOND_ABOVE, BEYOND_BELOW, UnitDesign
from softsensor.detection.fault_tests import TestDesign
from softsensor.detection.follow_up import DetectionDesign
from softsensor.detection.run_length import decision_interval
from softsensor.detection.signatures import filter_response, hypotheses, steady_filter
from softsensor.estimation.kernel import Floats, Kernel, build_kernel

CLIP = 4.0
"""Standardised innovations count up to this size in the sums, so that a spike does not look like a shift."""
SPIKE = 6.0
WINDOW = 2048
"""Innovations kept for the diagnosis."""
SETTLED = 20_000
"""Cycles after a bias began at which what it leaves is taken as settled."""
LEAST_REFERENCE, LARGEST_REFERENCE = 0.125, 1.0
GROSS_REFERENCE = 0.5
"""For a sensor whose tolerance-sized bias the filter absorbs (half the shift below LEAST_REFERENCE): its sums then watch
for gross steps only, because a more sensitive test would answer to every small misfit of the model."""
INTERVAL_STEP = 2.0**-12
"""Decision intervals are rounded up to this: linear algebra may differ in its last bits between machines, results not."""
LOOK_EVERY = 6
LOST_SECONDS, LOST_CYCLES = 300.0, 10


def load_model(path: str | Path) -> PlantModel:
    """Read a model file and discretise it.

    :raises ModelFileError: with every fault of the file.
    """
    return build_plant_model(read_model_file(path))


def steady_shifts(model: PlantModel, kernel: Kernel, window: int = SETTLED) -> Floats:
    """Innovation shift, in its standard deviations, that a tolerance-sized bias of each sensor really leaves in it.

    Taken ``window`` cycles after the bias began, with the filter settled; (n_sensors,).
    """
    use = np.ones(kernel.n_sensors, dtype=np.int64)
    steady = steady_filter(model, kernel, use)
    shifts = np.zeros(kernel.n_sensors)
    for i, sensor in enumerate(model.spec.sensors):
        signal = np.zeros((window, kernel.n_sensors))
        signal[:, i] = sensor.tolerance
        shifts[i] = abs(filter_response(kernel, steady.gains, use, signal)[-1, i]) / steady.sd[i]
    return shifts


def fault_test_design(model: PlantModel, kernel: Kernel) -> TestDesign:
    """Reference values from the shifts that tolerance-sized biases leave; intervals solved for the promised run length."""
    cycles = model.spec.false_flag_interval / model.spec.sample_time
    half = 0.5 * steady_shifts(model, kernel)
    reference = np.where(half < LEAST_REFERENCE, GROSS_REFERENCE, np.minimum(half, LARGEST_REFERENCE))
    exact = [decision_interval(float(value), cycles, clip=CLIP) for value in reference]
    interval = np.ceil(np.array(exact) / INTERVAL_STEP) * INTERVAL_STEP
    lost = max(LOST_CYCLES, int(np.ceil(LOST_SECONDS / model.spec.sample_time)))
    return TestDesign(
        reference,
        interval,
        CLIP,
        SPIKE,
        np.full(kernel.n_sensors, lost, dtype=np.int64),
        0.01 / cycles,
        np.array([item.noise_sd for item in model.spec.sensors]),
        LOOK_EVERY,
    )


def design_unit(model: PlantModel) -> UnitDesign:
    """Everything that a unit runs on, made once."""
    kernel = build_kernel(model)
    spec = model.spec
    detection = DetectionDesign(
        model,
        kernel,
        fault_test_design(model, kernel),
        hypotheses(model, WINDOW),
        WINDOW,
        round(spec.sample_time * 1e6),
        spec.leave_out_isolated,
        True,
    )
    low = np.array([item.range[0] - BEYOND_BELOW * (item.range[1] - item.range[0]) for item in spec.sensors])
    high = np.array([item.range[1] + BEYOND_ABOVE * (item.range[1] - item.range[0]) for item in spec.sensors])
    fresh = np.array([int(not item.on_change) for item in spec.sensors], dtype=np.int64)
    return UnitDesign(model, kernel, detection, fresh, (low, high))
