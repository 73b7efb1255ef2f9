"""Transforms once more, for the dense filter: numpy's log, square root and interpolation, slopes by finite differences."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, TypeVar

import numpy as np
from independent.transfer_paths import Array

from plant_models.specification import EstimateSpec, InputSpec, PathSpec, SensorSpec, UnitSpec
from plant_models.transform import Transform

Item = TypeVar("Item", InputSpec, SensorSpec, EstimateSpec)


def forward(transform: Transform | None, raw: Array) -> Array:
    """Transformed values, nan where there is none."""
    if transform is None:
        return raw
    with np.errstate(invalid="ignore", divide="ignore"):
        if transform.kind == "log":
            out = np.log(raw)
        elif transform.kind == "sqrt":
            out = np.sqrt(raw)
        else:
            x, y = np.array(transform.points).T
            out = np.interp(raw, x, y, left=np.nan, right=np.nan)
    return np.where(np.isfinite(out), out, np.nan)


def inverse(transform: Transform | None, model: Array) -> Array:
    """Raw values; a square root below zero mirrored, a table not beyond its ends."""
    if transform is None:
        return model
    if transform.kind == "log":
        return np.exp(model)
    if transform.kind == "sqrt":
        return np.sign(model) * np.square(model)
    x, y = np.array(transform.points).T
    order = np.argsort(y)
    return np.interp(model, y[order], x[order], left=np.nan, right=np.nan)


def local_slope(transform: Transform | None, raw: float) -> float:
    """Of the transform at a raw value, by central difference: at a table's point the mean of both sides."""
    if transform is None:
        return 1.0
    h = 1e-5 * max(abs(raw), 1.0)
    high, low = forward(transform, np.array([raw + h, raw - h]))
    return float((high - low) / (2.0 * h))


def inverse_slopes(transform: Transform | None, model: Array) -> Array:
    """How fast raw values move with model values, by differences; nan where both sides differ (points of a table)."""
    h = 1e-6 * np.maximum(np.abs(model), 1.0)
    up = (inverse(transform, model + h) - inverse(transform, model)) / h
    down = (inverse(transform, model) - inverse(transform, model - h)) / h
    return np.where(np.isclose(up, down, rtol=1e-2), 0.5 * (up + down), np.nan)


def exact_slope(transform: Transform | None, raw: float) -> float:
    """As :func:`local_slope`, to full precision for log and square root."""
    if transform is not None and transform.kind == "log":
        return float(1.0 / raw)
    if transform is not None and transform.kind == "sqrt":
        return float(0.5 / np.sqrt(raw))
    return local_slope(transform, raw)


def one_scaled(item: Item) -> Item:
    """An input, sensor or estimate as if it were given in its transformed scale."""
    scale = abs(exact_slope(item.transform, item.operating_point))
    changed: dict[str, Any] = {
        name: scale * getattr(item, name)
        for name in ("noise_sd", "tolerance", "bias_walk_sd", "bias_initial_sd")
        if hasattr(item, name)
    }
    if isinstance(item, EstimateSpec) and item.lab is not None:
        changed["lab"] = replace(item.lab, sd=scale * item.lab.sd)
    centre = float(forward(item.transform, np.array([item.operating_point]))[0])
    return replace(item, transform=None, operating_point=centre, **changed)


def path_with_points(path: PathSpec, points: Array) -> PathSpec:
    """A scheduled path with its points elsewhere, put in ascending order again."""
    assert path.schedule is not None
    order = [int(place) for place in np.argsort(points)]
    schedule = replace(
        path.schedule,
        at=tuple(float(points[k]) for k in order),
        gain=tuple(path.schedule.gain[k] for k in order),
        time_constants=tuple(path.schedule.time_constants[k] for k in order),
    )
    return replace(path, schedule=schedule)


def _path_scaled(path: PathSpec, spec: UnitSpec) -> PathSpec:
    if path.schedule is None:
        return path
    transform = next(item.transform for item in spec.inputs if item.tag == path.schedule.tag)
    return path_with_points(path, forward(transform, np.array(path.schedule.at)))


def transformed_unit(spec: UnitSpec) -> UnitSpec:
    """The unit in the scale of its transfer functions, without transforms: what the dense filter runs on."""
    return replace(
        spec,
        inputs=tuple(one_scaled(item) for item in spec.inputs),
        sensors=tuple(one_scaled(item) for item in spec.sensors),
        estimates=tuple(one_scaled(item) for item in spec.estimates),
        paths=tuple(_path_scaled(path, spec) for path in spec.paths),
    )
