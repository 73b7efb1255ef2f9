"""What can be known of each estimate along a schedule that disturbances go through: its filter settled at each point."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

from plant_models.building import build_plant_model
from plant_models.plant_model import PlantModel
from plant_models.schedules import path_at
from plant_models.specification import PathSpec, UnitSpec
from softsensor.estimation.observability import estimate_knowledge


@dataclass(frozen=True, slots=True)
class PointReport:
    """An estimate's sd as in EstimateKnowledge while ``tag`` rests at ``value``, other tags at their operating points."""

    tag: str
    value: float
    unit: str
    estimate: str
    sd_without_sensors: float
    sd_with_sensors: float


def along_schedules(model: PlantModel) -> tuple[PointReport, ...]:
    """Point by point; nothing where no disturbance goes through a schedule.

    :raises RealisationError: the filter does not settle at a point.
    """
    tags = {_tag(item.path) for item in model.scheduled_states}
    return tuple(
        line
        for item in model.spec.inputs
        if item.tag in tags
        for value in _points(model.spec, item.tag)
        for line in _knowledge(
            build_plant_model(_resting(model.spec, item.tag, value)), item.tag, value, item.unit
        )
    )


def _tag(path: PathSpec) -> str | None:
    return None if path.schedule is None else path.schedule.tag


def _points(spec: UnitSpec, tag: str) -> list[float]:
    """Every value at which a schedule of the tag has a point."""
    plans = [path.schedule for path in spec.paths if path.schedule is not None]
    return sorted({value for plan in plans if plan.tag == tag for value in plan.at})


def _resting(spec: UnitSpec, tag: str, value: float) -> UnitSpec:
    """The unit as it is while the tag stands still at a value, without schedules."""
    paths = (path_at(path, value) if _tag(path) == tag else path for path in spec.paths)
    return replace(spec, paths=tuple(replace(path, schedule=None) for path in paths))


def _knowledge(model: PlantModel, tag: str, value: float, unit: str) -> Iterator[PointReport]:
    for item in estimate_knowledge(model):
        yield PointReport(tag, value, unit, item.tag, item.sd_without_sensors, item.sd_with_sensors)
