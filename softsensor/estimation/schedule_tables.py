"""The schedules of a unit's paths as flat arrays for the compiled loop."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from plant_models.plant_model import PlantModel
from plant_models.specification import PathSpec, ScheduleSpec

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class Schedules(NamedTuple):
    """S scheduled paths with P points in all; m: most states of one of them, and one.

    ``last``, ``lags_now`` and ``work`` are work space: the value of the tag that the kernel's arrays belong to (S,), the
    time constants there (m,) and matrices (5, m, m).
    """

    block: Ints
    """(S,) The path among the kernel's input-driven ones."""
    tag: Ints
    """(S,) Index of the input by whose value the path goes."""
    first: Ints
    """(S + 1,) First point of each path; the last entry is P."""
    at: Floats
    """(P,)"""
    gain: Floats
    """(P,)"""
    lags: Floats
    """(P, m) Time constants in seconds, in the order in which they act."""
    n_lags: Ints
    """(S,)"""
    leads: Floats
    """(S, m) Lead times in seconds, zero where a lag has none."""
    fraction: Floats
    """(S,) Fraction of a sample in the dead time."""
    sample_time: float
    last: Floats
    lags_now: Floats
    work: Floats


def schedule_tables(model: PlantModel) -> Schedules:
    """The schedules of a model's input-driven paths; all of length zero where it has none."""
    paths = [path for _, path in model.scheduled]
    plans = [_plan(path) for path in paths]
    points = sum(len(plan.at) for plan in plans)
    sizes = [len(path.time_constants) + path.integrating for path in paths]
    m = max(sizes, default=0) + 1
    lags, leads = np.ones((points, m)), np.zeros((len(paths), m))
    first = np.cumsum([0, *(len(plan.at) for plan in plans)]).astype(np.int64)
    for s, (path, plan) in enumerate(zip(paths, plans, strict=True)):
        leads[s, : len(path.lead_times)] = path.lead_times
        for place, times in enumerate(plan.time_constants, start=int(first[s])):
            lags[place, : len(times)] = times
    tags = list(model.input_tags)
    return Schedules(
        np.array([number for number, _ in model.scheduled], dtype=np.int64),
        np.array([tags.index(plan.tag) for plan in plans], dtype=np.int64),
        first,
        np.array([value for plan in plans for value in plan.at], dtype=np.float64),
        np.array([value for plan in plans for value in plan.gain], dtype=np.float64),
        lags,
        np.array([len(path.time_constants) for path in paths], dtype=np.int64),
        leads,
        np.array([model.paths[number].fraction for number, _ in model.scheduled], dtype=np.float64),
        model.spec.sample_time,
        np.full(len(paths), np.nan),
        np.ones(m),
        np.zeros((5, m, m)),
    )


def _plan(path: PathSpec) -> ScheduleSpec:
    assert path.schedule is not None
    return path.schedule
