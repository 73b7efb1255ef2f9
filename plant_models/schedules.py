"""Paths whose gain and time constants change with a measured input.

Between two points of a schedule gain and each time constant are linear in the input's value, outside they are held.
With parameters at a value v, the path is the same in every form of the program::

    x' = A(v) x + gain(v) B(v) u,   y = C(v) x + gain(v) D(v) u       u: the source behind the dead time

where A, B, C, D are a cascade of (L_i s + 1)/(T_i s + 1), i = 1, 2, ... in the order of the file. The gain acts where the
input enters, so that the states are in the output's unit: a change of parameters moves no state, and without leads the
output does not jump. A stirred tank with a changing flow is such a path exactly: dT/dt = (F/V) (gain(F) u - T).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

from plant_models.specification import PathSpec, Range, ScheduleSpec, UnitSpec


def parameters_at(schedule: ScheduleSpec, value: float) -> tuple[float, tuple[float, ...]]:
    """Gain and time constants at a value of the schedule's tag.

    >>> parameters_at(ScheduleSpec("FI1", (8.0, 12.0), (2.0, 1.0), ((60.0,), (40.0,))), 9.0)
    (1.75, (55.0,))
    """
    columns = zip(*schedule.time_constants, strict=True)
    lags = tuple(value_between(schedule.at, column, value) for column in columns)
    return value_between(schedule.at, schedule.gain, value), lags


def value_between(at: Sequence[float], values: Sequence[float], value: float) -> float:
    """Linear between ascending points, held outside.

    >>> [value_between((8.0, 12.0), (2.0, 1.0), value) for value in (0.0, 9.0, 12.0, 99.0)]
    [2.0, 1.75, 1.0, 1.0]
    """
    if value <= at[0]:
        return values[0]
    if value >= at[-1]:
        return values[-1]
    upper = next(place for place, point in enumerate(at) if value < point)
    share = (value - at[upper - 1]) / (at[upper] - at[upper - 1])
    return values[upper - 1] + share * (values[upper] - values[upper - 1])


def path_at(path: PathSpec, value: float) -> PathSpec:
    """The path with the parameters of one value of its schedule's tag; it keeps its schedule."""
    if path.schedule is None:
        return path
    gain, time_constants = parameters_at(path.schedule, value)
    return replace(path, gain=gain, time_constants=time_constants)


def slowest_lag(path: PathSpec) -> float:
    """The longest time constant at any point of the schedule, in seconds; zero without time constants."""
    points = path.schedule.time_constants if path.schedule is not None else (path.time_constants,)
    return max((lag for point in points for lag in point), default=0.0)


def operating_points(spec: UnitSpec) -> dict[str, float]:
    """The operating point of every input."""
    return {item.tag: item.operating_point for item in spec.inputs}


def path_in_operation(path: PathSpec, points: Mapping[str, float]) -> PathSpec:
    """The path at the operating point of its schedule's tag; itself where it has no schedule or the tag is unknown."""
    if path.schedule is None or path.schedule.tag not in points:
        return path
    return path_at(path, points[path.schedule.tag])


def scheduled_ranges(spec: UnitSpec) -> dict[str, Range]:
    """By scheduling tag the range that all its schedules cover; outside it some parameters are held."""
    found: dict[str, Range] = {}
    for path in spec.paths:
        if path.schedule is not None:
            low, high = found.get(path.schedule.tag, (-math.inf, math.inf))
            found[path.schedule.tag] = (max(low, path.schedule.at[0]), min(high, path.schedule.at[-1]))
    return found


def schedule_faults(path: PathSpec, spec: UnitSpec) -> tuple[str, ...]:
    """What stops a schedule from being run, one line each; empty for a sound one, and where there is none."""
    schedule, name = path.schedule, f"{path.source} -> {path.target}"
    if schedule is None:
        return ()
    found = []
    if schedule.tag not in operating_points(spec):
        found.append(f"{name}: its schedule's tag {schedule.tag} is no input")
    if path.numerator is not None:
        found.append(f"{name}: a schedule needs gain and time constants, not numerator and denominator")
    count = len(schedule.at)
    lengths = {len(point) for point in schedule.time_constants}
    if count < 2 or len(schedule.gain) != count or len(schedule.time_constants) != count or len(lengths) > 1:
        found.append(f"{name}: its schedule needs two points or more, all with the same parameters")
    elif any(low >= high for low, high in zip(schedule.at, schedule.at[1:], strict=False)):
        found.append(f"{name}: the points of its schedule do not ascend")
    elif len(path.lead_times) > min(lengths):
        found.append(f"{name}: a schedule needs a time constant for each lead time")
    if any(lag <= 0.0 for point in schedule.time_constants for lag in point):
        found.append(f"{name}: a time constant of its schedule is not above zero")
    return tuple(found)
