"""The ``schedule`` of a ``[[transfer_function]]`` table: gain and time constants at several values of an input."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise

from plant_models.model_kinds import INPUT_TAG, NUMBERS, TABLE_OF_TIMES
from plant_models.model_scale import one_to_model
from plant_models.model_tables import FaultList, Table
from plant_models.quoting import quoted, suggestion
from plant_models.schedules import value_between
from plant_models.specification import InputSpec, PathSpec, ScheduleSpec, UnitSpec

KEYS = ("tag", "at", "gain", "time_constants")
EXPECTED = "a table such as { tag = 'FI2103', at = [8.0, 11.5, 15.0], gain = [-2.4, -1.9, -1.5] }"


@dataclass(frozen=True, slots=True)
class Points:
    """A schedule as written; None where gain or time constants are not in it and so do not change."""

    tag: str
    at: tuple[float, ...]
    gain: tuple[float, ...] | None
    time_constants: tuple[tuple[float, ...], ...] | None


def read_points(table: Table) -> Points | None:
    """The schedule of a transfer function; None where there is none."""
    inner = table.subtable("schedule", EXPECTED)
    if inner is None:
        return None
    inner.only(*KEYS)
    points = Points(
        inner.read("tag", INPUT_TAG),
        inner.read("at", NUMBERS, ", the values at which gain and time constants are given"),
        inner.read_or("gain", NUMBERS, None),
        inner.read_or("time_constants", TABLE_OF_TIMES, None),
    )
    if not inner.has("gain", "time_constants"):
        inner.fault("gain", "missing; expected gain, time_constants or both, one for each value in at")
    for key in ("gain", "time_constants"):
        if inner.has(key) and table.has(key):
            table.fault(key, f"expected {key} once: beside the schedule or in it; got both")
    if inner.sound("at"):
        _check_at(inner, points)
    return points


def _check_at(inner: Table, points: Points) -> None:
    """Ascending, and as many gains and time constants as there are points."""
    at = points.at
    if len(at) < 2:
        inner.fault("at", f"expected two values or more; got {quoted(list(at))}")
    elif any(low >= high for low, high in pairwise(at)):
        inner.fault("at", f"expected values that ascend, each above the one before; got {quoted(list(at))}")
    if points.gain is not None and inner.sound("gain"):
        if len(points.gain) != len(at):
            inner.fault(
                "gain", f"expected a gain for each of the {len(at)} values in at; got {len(points.gain)}"
            )
        elif not any(points.gain):
            inner.fault("gain", f"expected a gain other than zero; got {quoted(list(points.gain))}")
    if points.time_constants is not None and inner.sound("time_constants"):
        lists = points.time_constants
        if len(lists) != len(at):
            inner.fault(
                "time_constants",
                f"expected a list of times for each of the {len(at)} values in at; got {len(lists)} lists",
            )
        elif len({len(times) for times in lists}) > 1:
            found = ", ".join(str(len(times)) for times in lists)
            inner.fault("time_constants", f"expected as many times at each value in at; got {found}")


def with_schedule(path: PathSpec, points: Points | None, per: float) -> PathSpec:
    """The path with its schedule; what is not scheduled is the path's own at every point.

    :param per: seconds in the unit of time of an integrating path's gain, 1 for others.
    """
    if points is None:
        return path
    count, gain = len(points.at), path.gain if path.gain is not None else 1.0
    return replace(
        path,
        schedule=ScheduleSpec(
            points.tag,
            points.at,
            tuple(value / per for value in points.gain) if points.gain is not None else (gain,) * count,
            points.time_constants if points.time_constants is not None else (path.time_constants,) * count,
        ),
    )


def scheduling_tags(tables: list[Table]) -> set[str]:
    """The tags that schedules name, as written."""
    inner = [table.values.get("schedule") for table in tables]
    tags = [item.get("tag") for item in inner if isinstance(item, dict)]
    return {tag for tag in tags if isinstance(tag, str)}


def check_schedules(spec: UnitSpec, tables: list[Table], faults: FaultList) -> None:
    """Each schedule goes by an input, within its range and around its operating point.

    :param tables: the tables of spec.paths, in the same order.
    """
    inputs = {item.tag: item for item in spec.inputs}
    others = {item.tag: "a sensor" for item in spec.sensors} | {
        item.tag: "an estimate" for item in spec.estimates
    }
    others |= {item.name: "a disturbance" for item in spec.disturbances}
    for path, table in zip(spec.paths, tables, strict=True):
        schedule, written = path.schedule, table.values.get("schedule")
        if schedule is None or not isinstance(written, dict):
            continue
        inner = Table(written, (*table.place, "schedule"), faults, "schedule.")
        if written.get("tag") != schedule.tag:
            continue
        if schedule.tag not in inputs:
            inner.fault("tag", _no_input(schedule.tag, inputs, others))
        else:
            _check_reach(inner, schedule, inputs[schedule.tag])


def _no_input(tag: str, inputs: Mapping[str, InputSpec], others: Mapping[str, str]) -> str:
    message = f"expected an input's tag; got {quoted(tag)}"
    if tag not in others:
        return message + suggestion(tag, tuple(inputs))
    why = {
        "a sensor": ": its noise, and a fault that is looked for in it, would change the model itself",
        "an estimate": ": the model would depend on what is worked out with it",
    }.get(others[tag], ": it is not measured")
    return f"{message}, which is {others[tag]}{why}"


def _check_reach(inner: Table, schedule: ScheduleSpec, item: InputSpec) -> None:
    """Points within the instrument's range, the operating point among them: there tests are designed."""
    if list(schedule.at) != inner.values.get("at"):
        return
    low, high = item.range
    if not (low <= schedule.at[0] and schedule.at[-1] <= high):
        inner.fault(
            "at",
            f"expected values within the range of {item.tag}, {low:g} to {high:g}; "
            f"got {quoted(list(schedule.at))}",
        )
    if not schedule.at[0] <= item.operating_point <= schedule.at[-1]:
        inner.fault(
            "at",
            f"expected values on both sides of the operating point of {item.tag}, {item.operating_point:g}; "
            f"got {quoted(list(schedule.at))}",
        )
    elif not all(math.isfinite(one_to_model(item, value)) for value in schedule.at):
        inner.fault(
            "at", f"expected values that the transform of {item.tag} takes; got {quoted(list(schedule.at))}"
        )
    elif len(schedule.gain) == len(schedule.at) and not value_between(
        schedule.at, schedule.gain, item.operating_point
    ):
        inner.fault(
            "gain",
            f"expected a gain other than zero at the operating point of {item.tag}, {item.operating_point:g}",
        )
