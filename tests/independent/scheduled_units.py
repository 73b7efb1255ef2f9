"""Random units whose paths change with an input."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from independent.random_models import random_unit

from plant_models.specification import PathSpec, ScheduleSpec, UnitSpec

OFFSETS = (-3.0, -1.0, 0.0, 1.5, 4.0)
"""Points of a schedule from the operating point of its tag: runs cross them, and leave them now and then."""


def scheduled_unit(seed: int) -> UnitSpec:
    """``random_unit(seed)`` with a schedule on every path that may have one, on those of disturbances for even seeds."""
    spec = random_unit(seed)
    rng = np.random.default_rng([7, seed])
    return replace(spec, paths=tuple(_scheduled(path, spec, rng) for path in spec.paths))


def disturbed(path: PathSpec, spec: UnitSpec) -> bool:
    """Does a disturbance go through the path?"""
    return any(path.source in (item.name, item.at_input) for item in spec.disturbances)


def _scheduled(path: PathSpec, spec: UnitSpec, rng: np.random.Generator) -> PathSpec:
    """Factored paths with a time constant for each lead."""
    if path.numerator is not None or len(path.lead_times) > len(path.time_constants):
        return path
    if disturbed(path, spec) and int(spec.name.removeprefix("U-")) % 2:
        return path
    item = spec.inputs[int(rng.integers(len(spec.inputs)))]
    count = int(rng.integers(2, len(OFFSETS) + 1))
    offsets = np.sort(rng.choice([value for value in OFFSETS if value], count - 1, replace=False))
    at = np.sort(np.append(offsets, 0.0))
    assert path.gain is not None
    gain = path.gain * np.exp(rng.normal(0.0, 0.5, count))
    lags = np.array(path.time_constants) * np.exp(rng.normal(0.0, 0.5, (count, len(path.time_constants))))
    schedule = ScheduleSpec(
        item.tag,
        tuple(float(item.operating_point + value) for value in at),
        tuple(float(value) for value in gain),
        tuple(tuple(float(value) for value in row) for row in lags),
    )
    return replace(path, schedule=schedule)
