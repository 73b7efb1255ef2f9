"""The reading rules of one tag, compiled: readings and state -> what each cycle sees, and the new state."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple, TypeVar, cast

import numba
import numpy as np
from numpy.typing import NDArray

Function = TypeVar("Function", bound=Callable[..., Any])

NEVER = -(2**63)
"""A time before every time: nothing has been seen yet."""

GOOD, UNCERTAIN, BAD, MISSING, STALE, UNMAPPED = 0, 1, 2, 3, 4, 5
"""Codes of softsensor.readings_of_cycle.CycleQuality, as plain integers for the compiler."""


class TagState(NamedTuple):
    """What is carried on for one tag; times are UTC microseconds, NEVER where there is none."""

    newest_time: int = NEVER
    newest_value: float = float("nan")
    newest_quality: int = MISSING
    used_time: int = NEVER
    """Source time of the last reading taken by a cycle; not taken again where readings count once."""
    usable_time: int = NEVER
    usable_value: float = float("nan")
    usable_quality: int = MISSING
    """The newest reading that is finite and not Bad: what an input holds."""


def _compiled(function: Function) -> Function:
    return cast(Function, numba.njit(cache=True)(function))


@_compiled
def _take(state: TagState, time: int, value: float, quality: int) -> TagState:
    """The state after one more reading; one that is not newer than what is known changes nothing."""
    newest_time, newest_value, newest_quality = state.newest_time, state.newest_value, state.newest_quality
    usable_time, usable_value, usable_quality = state.usable_time, state.usable_value, state.usable_quality
    usable = quality < BAD and np.isfinite(value)
    if time > newest_time:
        newest_time, newest_value = time, value
        newest_quality = quality if usable else max(quality, BAD)
    if usable and time > usable_time:
        usable_time, usable_value, usable_quality = time, value, quality
    return TagState(
        newest_time,
        newest_value,
        newest_quality,
        state.used_time,
        usable_time,
        usable_value,
        usable_quality,
    )


@_compiled
def _use_newest(state: TagState) -> TagState:
    return TagState(
        state.newest_time,
        state.newest_value,
        state.newest_quality,
        state.newest_time,
        state.usable_time,
        state.usable_value,
        state.usable_quality,
    )


@_compiled
def sensor_readings(
    times: NDArray[np.int64],
    values: NDArray[np.float64],
    qualities: NDArray[np.int8],
    cycles: NDArray[np.int64],
    max_age: int,
    counts_once: bool,
    state: TagState,
    y: NDArray[np.float64],
    y_quality: NDArray[np.int8],
) -> TagState:
    """Fill ``y`` and ``y_quality`` (N,) with what each cycle sees of a sensor; return the state after them.

    ``times``, ``values``, ``qualities`` (n,) are the readings that ``state`` has not seen, in increasing
    time; ``cycles`` (N,) increase too; ``max_age`` is in microseconds.
    """
    event = 0
    for k in range(cycles.shape[0]):
        now = cycles[k]
        while event < times.shape[0] and times[event] <= now:
            state = _take(state, times[event], values[event], int(qualities[event]))
            event += 1
        y[k] = np.nan
        if state.newest_time == NEVER:
            y_quality[k] = MISSING
        elif now - state.newest_time > max_age:
            y_quality[k] = STALE
        elif counts_once and state.newest_time == state.used_time:
            y_quality[k] = MISSING
        else:
            state = _use_newest(state)
            y_quality[k] = state.newest_quality
            if state.newest_quality < BAD:
                y[k] = state.newest_value
    return state


@_compiled
def input_values(
    times: NDArray[np.int64],
    values: NDArray[np.float64],
    qualities: NDArray[np.int8],
    cycles: NDArray[np.int64],
    max_age: int,
    state: TagState,
    u: NDArray[np.float64],
    u_quality: NDArray[np.int8],
) -> TagState:
    """Fill ``u`` and ``u_quality`` (N,) with what an input holds at each cycle; return the state after them.

    Arguments as in :func:`sensor_readings`. Too old counts before Bad: an input whose newest readings are Bad
    becomes STALE once its last usable value is older than ``max_age``.
    """
    event = 0
    for k in range(cycles.shape[0]):
        now = cycles[k]
        while event < times.shape[0] and times[event] <= now:
            state = _take(state, times[event], values[event], int(qualities[event]))
            event += 1
        u[k] = state.usable_value
        if state.usable_time == NEVER:
            u_quality[k] = MISSING
        elif now - state.usable_time > max_age:
            u_quality[k] = STALE
        elif state.newest_quality >= BAD:
            u_quality[k] = state.newest_quality
        else:
            u_quality[k] = state.usable_quality
    return state
