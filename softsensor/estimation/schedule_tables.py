"""The schedules of a unit's paths as flat arrays for the compiled loop."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from plant_models.plant_model import PlantModel
from plant_models.specification import PathSpec, ScheduleSpec

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Mask = NDArray[np.bool_]


class Schedules(NamedTuple):
    """S scheduled paths with P points in all: those from inputs first, then those from disturbances; m: most states of one
    of them, and one.

    ``last``, ``lags_now``, ``c_now`` and ``work`` are work space: the value of the tag that the kernel's arrays belong to
    (S,), time constants and output row of one path (m,), matrices (5, m, m).
    """

    block: Ints
    """(S,) The path among the kernel's input-driven ones; -1 for one from a disturbance."""
    state: Ints
    """(S,) Its first state, in the stochastic part for one from a disturbance."""
    size: Ints
    """(S,) Number of its states."""
    c_at: Ints
    """(S,) Where its states begin in c_val, for one from a disturbance."""
    d_at: Ints
    """(S,) Where its direct term is in c_val; -1 for none."""
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
    c_now: Floats
    work: Floats


class Masks(NamedTuple):
    """Entries of A (n, n) and C (rows, n) that schedules write, whatever their values are at the operating point."""

    A: Mask
    C: Mask


def states_of(path: PathSpec) -> int:
    """Number of states of a scheduled path."""
    return len(path.time_constants) + path.integrating


def is_direct(path: PathSpec) -> bool:
    """Does its source reach the output without passing a lag?"""
    return not path.integrating and len(path.lead_times) == len(path.time_constants)


def scheduled_entries(model: PlantModel) -> Masks:
    """What of the stochastic part follows schedules."""
    A, C = np.zeros(model.stochastic.A.shape, dtype=bool), np.zeros(model.stochastic.C.shape, dtype=bool)
    for item in model.scheduled_states:
        n, older = states_of(item.path), int(item.fraction > 0.0)
        for i in range(n):
            A[item.state + i, item.state : item.state + i + 1] = True
            A[item.state + i, item.newest : item.newest + 1 + older] = True
        C[item.row, item.state : item.state + n] = True
        C[item.row, item.newest + older] |= is_direct(item.path)
    return Masks(A, C)


def schedule_tables(model: PlantModel, c_ptr: Ints, c_idx: Ints) -> Schedules:
    """The schedules of a model's paths; all of length zero where it has none.

    :param c_ptr: with ``c_idx`` the compressed rows of C, :func:`scheduled_entries` among them.
    """
    changing = model.scheduled_states
    paths = [path for _, path in model.scheduled] + [item.path for item in changing]
    fractions = [model.paths[number].fraction for number, _ in model.scheduled]
    sizes = [len(path.c) for path in model.paths]
    from_inputs = len(model.scheduled)
    first, at, gain, lags, leads = _points(paths)
    m, tags = lags.shape[1], list(model.input_tags)

    def column(row: int, state: int) -> int:
        return int(c_ptr[row] + np.searchsorted(c_idx[c_ptr[row] : c_ptr[row + 1]], state))

    return Schedules(
        _ints([number for number, _ in model.scheduled] + [-1] * len(changing)),
        _ints([sum(sizes[:number]) for number, _ in model.scheduled] + [item.state for item in changing]),
        _ints([states_of(path) for path in paths]),
        _ints([-1] * from_inputs + [column(item.row, item.state) for item in changing]),
        _ints(
            [-1] * from_inputs
            + [
                column(item.row, item.newest + int(item.fraction > 0.0)) if is_direct(item.path) else -1
                for item in changing
            ]
        ),
        _ints([tags.index(_plan(path).tag) for path in paths]),
        first,
        at,
        gain,
        lags,
        _ints([len(path.time_constants) for path in paths]),
        leads,
        np.array(fractions + [item.fraction for item in changing], dtype=np.float64),
        model.spec.sample_time,
        np.full(len(paths), np.nan),
        np.ones(m),
        np.zeros(m),
        np.zeros((5, m, m)),
    )


def _points(paths: list[PathSpec]) -> tuple[Ints, Floats, Floats, Floats, Floats]:
    """First point of each path, the tag's values, gains, time constants; the paths' leads."""
    plans = [_plan(path) for path in paths]
    first = np.cumsum([0, *(len(plan.at) for plan in plans)]).astype(np.int64)
    m = max((states_of(path) for path in paths), default=0) + 1
    lags, leads = np.ones((int(first[-1]), m)), np.zeros((len(paths), m))
    for s, (path, plan) in enumerate(zip(paths, plans, strict=True)):
        leads[s, : len(path.lead_times)] = path.lead_times
        for place, times in enumerate(plan.time_constants, start=int(first[s])):
            lags[place, : len(times)] = times
    at = np.array([value for plan in plans for value in plan.at], dtype=np.float64)
    gain = np.array([value for plan in plans for value in plan.gain], dtype=np.float64)
    return first, at, gain, lags, leads


def _ints(values: list[int]) -> Ints:
    return np.array(values, dtype=np.int64)


def _plan(path: PathSpec) -> ScheduleSpec:
    assert path.schedule is not None
    return path.schedule
