"""The keys ``transform`` and ``limits`` of a model file."""

from __future__ import annotations

import math
from collections.abc import Sequence
from itertools import pairwise

import numpy as np

from plant_models.model_kinds import Kind, RefusalError
from plant_models.model_tables import Table
from plant_models.quoting import quoted
from plant_models.specification import Range
from plant_models.transform import Transform

MOST_POINTS = 1000
"""Points of a table."""

_NAMED = {"log": Transform("log"), "sqrt": Transform("sqrt"), "square root": Transform("sqrt")}


def read_transform(table: Table, operating_point: float) -> Transform | None:
    """The transform of a tag, in whose domain its operating point must lie; None where the table has none."""
    found = table.read_or("transform", TRANSFORM, None)
    if found is None or not table.sound("transform", "operating_point"):
        return None
    inside = bool(found.holds(np.array([operating_point]))[0])
    if not inside or (operating_point == 0.0 and found.kind != "table"):
        expected = found.expected if found.kind == "table" else "a value above zero"
        table.fault(
            "operating_point",
            f"expected {expected}, where its transform ({found.text}) has a slope; got {quoted(operating_point)}",
        )
        return None
    return found


def read_limits(table: Table, operating_point: float, transform: Transform | None) -> Range | None:
    """The physical limits of an estimate, between which its operating point must lie; None where it has none."""
    limits = table.read_or("limits", LIMITS, None)
    if limits is None or not table.sound("limits", "operating_point"):
        return None
    if not limits[0] <= operating_point <= limits[1]:
        table.fault(
            "limits",
            f"expected limits around operating_point, {operating_point:g}; got {quoted(list(limits))}",
        )
        return None
    if transform is not None and transform.limits(*limits)[0] == transform.limits(*limits)[1]:
        table.fault("limits", f"expected limits within which {transform.text} has more than one value")
        return None
    return limits


def _transform(value: object) -> Transform:
    if isinstance(value, str):
        if value not in _NAMED:
            raise RefusalError("")
        return _NAMED[value]
    if not isinstance(value, list):
        raise RefusalError("")
    return Transform("table", _points(value))


def _points(rows: Sequence[object]) -> tuple[tuple[float, float], ...]:
    if not 2 <= len(rows) <= MOST_POINTS:
        raise RefusalError(f"which has {len(rows)} points; a table has 2 to {MOST_POINTS}")
    points = tuple(_point(row, place) for place, row in enumerate(rows, start=1))
    for place, ((x, _), (following, _)) in enumerate(pairwise(points), start=2):
        if not x < following:
            raise RefusalError(f"where the raw value of point {place} is not above the one before")
    steps = [following - y for (_, y), (_, following) in pairwise(points)]
    for place, step in enumerate(steps, start=2):
        if step == 0.0 or (step > 0.0) != (steps[0] > 0.0):
            turned = "neither rises nor falls" if step == 0.0 else "turns round"
            raise RefusalError(f"where the model value {turned} at point {place}")
        slope = step / (points[place - 1][0] - points[place - 2][0])
        if not 0.0 < abs(slope) < math.inf or not math.isfinite(1.0 / slope):
            raise RefusalError(f"where the slope before point {place} is too small or too large")
    return points


def _point(row: object, place: int) -> tuple[float, float]:
    if not isinstance(row, list) or len(row) != 2 or not all(_finite(item) for item in row):
        raise RefusalError(f"where point {place} is no pair of finite numbers")
    return float(row[0]), float(row[1])


def _finite(value: object) -> bool:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return False
    try:
        return math.isfinite(float(value))
    except OverflowError:
        return False


def _limits(value: object) -> Range:
    if not isinstance(value, list) or len(value) != 2:
        raise RefusalError("")
    if any(isinstance(item, bool) or not isinstance(item, (int, float)) for item in value):
        raise RefusalError("")
    try:
        low, high = (float(item) for item in value)
    except OverflowError:
        raise RefusalError("which are too large") from None
    if not low < high:
        raise RefusalError("where the first is not below the second")
    if low == math.inf or high == -math.inf or (math.isinf(low) and math.isinf(high)):
        raise RefusalError("where at least one limit is finite")
    return low, high


TRANSFORM = Kind(
    "'log', 'sqrt' or a strictly monotone table of [raw, model] points, raw ascending, such as "
    "[[0.0, 0.0], [50.0, 20.0], [100.0, 100.0]]",
    _transform,
    _NAMED["log"],
)
LIMITS: Kind[Range] = Kind(
    "two numbers, the lower first, one of which may be inf, such as [0.0, inf]", _limits, (0.0, 1.0)
)
