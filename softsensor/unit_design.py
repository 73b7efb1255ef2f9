"""From a plant model to everything one unit runs on: kernel, test settings that keep the promise, suspects."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from plant_models.building import build_plant_model
from plant_models.model_file import read_model_file
from plant_models.plant_model import PlantModel
from plant_models.schedules import scheduled_ranges
from softsensor.cycle import BEYOND_ABOVE, BEYOND_BELOW, UnitDesign
from softsensor.detection.beginning import forgetting
from softsensor.detection.design_of_tests import fault_test_design
from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.gain_changes import path_hypotheses
from softsensor.detection.long_memory import long_memory
from softsensor.detection.signatures import cycles_to_settle, hypotheses, steady_filter
from softsensor.estimation.kernel import build_kernel

WINDOW = 2048
"""Innovations kept for the diagnosis."""
KEPT_DESIGNS = 4
_DESIGNS: list[UnitDesign] = []


def load_model(path: str | Path) -> PlantModel:
    """Read a model file and discretise it.

    :raises ModelFileError: with every fault of the file.
    """
    return build_plant_model(read_model_file(path))


def designed(model: PlantModel) -> UnitDesign:
    """The design of this very model, made once while it is among the KEPT_DESIGNS asked for last: models do not change."""
    for design in _DESIGNS:
        if design.model is model:
            return design
    _DESIGNS.insert(0, design_unit(model))
    del _DESIGNS[KEPT_DESIGNS:]
    return _DESIGNS[0]


def design_unit(model: PlantModel) -> UnitDesign:
    """Everything that a unit runs on, made once."""
    kernel = build_kernel(model)
    spec = model.spec
    steady = steady_filter(model, kernel, np.ones(kernel.n_sensors, dtype=np.int64))
    tests = fault_test_design(model, kernel)
    past = forgetting(model, kernel, steady, tests.reference[:, 0])
    tests = tests._replace(forgotten_after=past.until)
    detection = DetectionDesign(
        model,
        kernel,
        tests,
        hypotheses(model, WINDOW),
        path_hypotheses(model, kernel),
        WINDOW,
        round(spec.sample_time * 1e6),
        spec.leave_out_isolated,
        spec.back_by_itself,
        True,
        past,
        long_memory(model),
        cycles_to_settle(model, kernel, steady, WINDOW),
    )
    low = np.array([item.range[0] - BEYOND_BELOW * (item.range[1] - item.range[0]) for item in spec.sensors])
    high = np.array([item.range[1] + BEYOND_ABOVE * (item.range[1] - item.range[0]) for item in spec.sensors])
    fresh = np.array([int(not item.on_change) for item in spec.sensors], dtype=np.int64)
    covered = scheduled_ranges(spec)
    scheduled = tuple((j, covered[tag]) for j, tag in enumerate(model.input_tags) if tag in covered)
    return UnitDesign(model, kernel, detection, fresh, (low, high), scheduled)
