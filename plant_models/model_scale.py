"""A unit's numbers in the scale in which its transfer functions hold, where its tags have transforms.

With T a tag's transform, op its operating point and s = |T'(op)|: the operating point becomes T(op); noise_sd, tolerance,
bias_walk_sd, bias_initial_sd and lab.sd, which the file gives in the tag's engineering unit, become s times as large;
range and validated_range keep their place about the operating point, s times as wide. The points of a schedule become
those of its tag's scale. Gains, disturbances, gate, interval_scale and everything without a unit are the same in both.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any, TypeVar

import numpy as np

from plant_models.elementary_arrays import Floats
from plant_models.specification import EstimateSpec, InputSpec, PathSpec, Range, SensorSpec, UnitSpec
from plant_models.transform import Transform

Variable = InputSpec | SensorSpec | EstimateSpec
Item = TypeVar("Item", InputSpec, SensorSpec, EstimateSpec)

_DIFFERENCES = ("noise_sd", "tolerance", "bias_walk_sd", "bias_initial_sd")


def in_model_scale(spec: UnitSpec) -> UnitSpec:
    """The specification with every number in the scale of its transfer functions; itself where there is no transform."""
    if not has_transforms(spec):
        return spec
    return replace(
        spec,
        inputs=tuple(_scaled(item) for item in spec.inputs),
        sensors=tuple(_scaled(item) for item in spec.sensors),
        estimates=tuple(_scaled(item) for item in spec.estimates),
        paths=tuple(_path_scaled(path, spec) for path in spec.paths),
    )


def has_transforms(spec: UnitSpec) -> bool:
    """Has any input, sensor or estimate a transform?"""
    return any(item.transform is not None for item in variables(spec))


def variables(spec: UnitSpec) -> tuple[Variable, ...]:
    """All that has a tag and a unit: inputs, sensors, estimates."""
    return (*spec.inputs, *spec.sensors, *spec.estimates)


def scale_at_operating_point(item: Variable) -> float:
    """Model units per engineering unit at the operating point, as a size; 1 without a transform."""
    return 1.0 if item.transform is None else abs(item.transform.slope(item.operating_point))


def to_model(items: Sequence[Variable], values: Floats) -> Floats:
    """Engineering units to model scale, column by column (N, len(items)); the same array where there is no transform.

    nan where a value lies outside its transform's domain.
    """
    if all(item.transform is None for item in items):
        return values
    out = np.array(values, dtype=np.float64)
    for transform, columns in _by_transform(items):
        out[:, columns] = transform.forward(values[:, columns])
    return out


def slopes(items: Sequence[Variable], values: Floats) -> Floats:
    """How fast values in model scale move with those in engineering units, ``values`` (N, len(items)), as sizes; one row of
    ones where there is no transform.
    """
    if all(item.transform is None for item in items):
        return np.ones((1, len(items)))
    out = np.ones(values.shape)
    for transform, columns in _by_transform(items):
        out[:, columns] = np.abs(transform.slopes(values[:, columns]))
    return out


def _by_transform(items: Sequence[Variable]) -> list[tuple[Transform, list[int]]]:
    """Each transform with the columns that have it: a live cycle costs by the call."""
    found: dict[Transform, list[int]] = {}
    for column, item in enumerate(items):
        if item.transform is not None:
            found.setdefault(item.transform, []).append(column)
    return list(found.items())


def from_model(item: Variable, values: Floats) -> Floats:
    """Model scale to the tag's engineering unit; the same array where it has no transform."""
    return values if item.transform is None else item.transform.back(values)


def columns_from_model(items: Sequence[Variable], values: Floats) -> Floats:
    """As :func:`from_model`, column by column (N, len(items))."""
    if all(item.transform is None for item in items):
        return values
    return np.column_stack([from_model(item, values[:, column]) for column, item in enumerate(items)])


def one_to_model(item: Variable, value: float) -> float:
    """One value in model scale; nan outside the transform's domain."""
    return value if item.transform is None else float(item.transform.forward(np.array([value]))[0])


def one_from_model(item: Variable, value: float) -> float:
    """One value in the tag's engineering unit."""
    return value if item.transform is None else float(item.transform.back(np.array([value]))[0])


def bias_in_unit(item: Variable, size: float, size_sd: float) -> tuple[float, float]:
    """An instrument's bias in model scale, with its sd, in the engineering unit of an instrument at its operating point.

    What it reads too much there: back(T(op) + size) - op; the sd by the derivative at the biased value.
    """
    if item.transform is None:
        return size, size_sd
    biased = np.array([one_to_model(item, item.operating_point) + size])
    moved = float(item.transform.back(biased)[0]) - item.operating_point
    return moved, size_sd * abs(float(item.transform.back_slope(biased)[0]))


def _scaled(item: Item) -> Item:
    if item.transform is None:
        return item
    scale, centre = scale_at_operating_point(item), one_to_model(item, item.operating_point)
    changed: dict[str, Any] = {key: scale * getattr(item, key) for key in _DIFFERENCES if hasattr(item, key)}
    changed["operating_point"] = centre
    changed["range"] = _about(item, item.range, centre)
    if item.validated_range is not None:
        changed["validated_range"] = _about(item, item.validated_range, centre)
    if isinstance(item, EstimateSpec) and item.lab is not None:
        changed["lab"] = replace(item.lab, sd=scale * item.lab.sd)
    return replace(item, transform=None, **changed)


def _path_scaled(path: PathSpec, spec: UnitSpec) -> PathSpec:
    """The path with its schedule's points in the scale of their tag, ascending there too."""
    schedule = path.schedule
    item = next((item for item in spec.inputs if schedule is not None and item.tag == schedule.tag), None)
    if schedule is None or item is None or item.transform is None:
        return path
    at = [one_to_model(item, value) for value in schedule.at]
    order = range(len(at)) if at[0] < at[-1] else range(len(at) - 1, -1, -1)
    moved = replace(
        schedule,
        at=tuple(at[k] for k in order),
        gain=tuple(schedule.gain[k] for k in order),
        time_constants=tuple(schedule.time_constants[k] for k in order),
    )
    return replace(path, schedule=moved)


def _about(item: Variable, limits: Range, centre: float) -> Range:
    """Limits at the same distances, in model scale, from the operating point; the lower first."""
    assert item.transform is not None
    slope = item.transform.slope(item.operating_point)
    ends = [centre + slope * (end - item.operating_point) for end in limits]
    return min(ends), max(ends)
