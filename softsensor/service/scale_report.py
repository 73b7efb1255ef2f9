"""Tags whose transfer functions hold between transformed values, and estimates with physical limits, for the report."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

from plant_models.model_scale import Variable, one_to_model, variables
from plant_models.specification import EstimateSpec, Range, UnitSpec
from plant_models.units import difference_unit


@dataclass(frozen=True, slots=True)
class ScaleReport:
    """One tag. ``slope``: transformed units per unit at the operating point, by which noise, tolerance and bias are
    converted; ``slope_from`` and ``slope_to``: smallest and largest within the validated range (the range where there is
    none) and the transform's domain. All None without a transform; ``limits`` None without any.
    """

    tag: str
    unit: str
    transform: str | None
    transformed_operating_point: float | None
    slope: float | None
    slope_from: float | None
    slope_to: float | None
    limits: Range | None


def scale_reports(spec: UnitSpec) -> tuple[ScaleReport, ...]:
    """Of every input, sensor and estimate with a transform or limits."""
    return tuple(
        _report(item)
        for item in variables(spec)
        if item.transform is not None or (isinstance(item, EstimateSpec) and item.limits is not None)
    )


def scale_unit(item: Variable) -> str:
    """The unit between whose values the transfer functions of a tag hold, of differences.

    >>> from plant_models.transform import Transform
    >>> scale_unit(EstimateSpec("AY1", "ppm", 5.0, (0.0, 9.0), transform=Transform("log")))
    'log(ppm)'
    """
    return difference_unit(item.unit) if item.transform is None else f"{item.transform.kind}({item.unit})"


def _report(item: Variable) -> ScaleReport:
    limits = item.limits if isinstance(item, EstimateSpec) else None
    if item.transform is None:
        return ScaleReport(item.tag, item.unit, None, None, None, None, None, limits)
    slopes = _slopes(item)
    slope = item.transform.slope(item.operating_point)
    at_rest = one_to_model(item, item.operating_point)
    return ScaleReport(
        item.tag, item.unit, item.transform.text, at_rest, slope, min(slopes), max(slopes), limits
    )


def _slopes(item: Variable) -> list[float]:
    """Sizes of the slope at the ends of the range looked at, and at a table's pieces between them."""
    assert item.transform is not None
    low, high = item.validated_range or item.range
    first, last = item.transform.domain
    low, high = max(low, first), min(high, last)
    if item.transform.kind != "table":
        low = low if low > 0.0 else min(0.01 * high, item.operating_point)
        return [abs(item.transform.slope(end)) for end in (low, item.operating_point, high)]
    points = [low, *(x for x, _ in item.transform.points if low < x < high), high]
    between = [0.5 * (one + other) for one, other in pairwise(points)]
    return [abs(item.transform.slope(x)) for x in between]
