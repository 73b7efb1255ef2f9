"""A path with a schedule by other means than the program's: dense matrices made anew in every cycle, scipy's exponential.

Written from the handbook's words: the source behind its dead time, times the gain, goes through the lags one after
another in the order of the file, each with its lead or none, and then through the integrator if there is one; gain and
time constants are those of the cycle in which the sample begins.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from independent.transfer_paths import Array, split_delay
from scipy.linalg import expm

from plant_models.specification import PathSpec


@dataclass(frozen=True)
class Momentary:
    """dx/dt = A x + b w, y = c x + d w, w the delayed source; ``rest``: the state of a steady source of one."""

    A: Array
    b: Array
    c: Array
    d: float
    rest: Array


@cache
def momentary(path: PathSpec, value: float) -> Momentary:
    """The path with the parameters of one value of its tag, found by putting in one unit of everything in turn."""
    schedule = path.schedule
    assert schedule is not None
    gain = float(np.interp(value, schedule.at, schedule.gain))
    lags = [
        float(np.interp(value, schedule.at, times)) for times in zip(*schedule.time_constants, strict=True)
    ]
    order = len(lags) + path.integrating
    columns = [through(path, gain, lags, unit[:order], unit[order]) for unit in np.eye(order + 1)]
    slopes = np.array([slope for slope, _ in columns]).T.reshape(order, order + 1)
    outputs = np.array([output for _, output in columns])
    rest = np.array([gain] * len(lags) + [0.0] * path.integrating)
    return Momentary(slopes[:, :order], slopes[:, order], outputs[:order], float(outputs[order]), rest)


def through(path: PathSpec, gain: float, lags: list[float], x: Array, w: float) -> tuple[Array, float]:
    """What the states ``x`` do under the delayed source ``w``, and the output."""
    signal, slopes = gain * w, []
    leads = [*path.lead_times, *[0.0] * len(lags)]
    for state, lag, lead in zip(x, lags, leads, strict=False):
        slope = (signal - state) / lag
        slopes.append(slope)
        signal = state + lead * slope
    if path.integrating:
        slopes.append(signal)
        signal = x[-1]
    return np.array(slopes), float(signal)


@cache
def transition(
    path: PathSpec, value: float, rest_of_delay: float, sample_time: float
) -> tuple[Array, Array, Array]:
    """Phi, and the columns for the older and the recent value of the source within one sample."""
    now = momentary(path, value)
    n = len(now.b)
    older, recent = np.zeros((n + 2, n + 2)), np.zeros((n + 2, n + 2))
    older[:n, :n] = recent[:n, :n] = now.A
    older[:n, n], recent[:n, n + 1] = now.b, now.b
    whole = expm(recent * (1.0 - rest_of_delay) * sample_time) @ expm(older * rest_of_delay * sample_time)
    return whole[:n, :n], whole[:n, n], whole[:n, n + 1]


def scheduled_response(path: PathSpec, u: Array, values: Array, sample_time: float) -> Array:
    """Output at every cycle for the source's deviations ``u`` (N,), from steady state with the first ones.

    :param values: (N,) of the schedule's tag, in engineering units.
    """
    whole, rest = split_delay(path.dead_time / sample_time)

    def source(k: int) -> float:
        return float(u[max(k, 0)])

    x = momentary(path, float(values[0])).rest * u[0]
    out = np.zeros(len(u))
    for k in range(len(u)):
        now = momentary(path, float(values[k]))
        out[k] = now.c @ x + now.d * source(k - whole - (rest > 0.0))
        phi, older, recent = transition(path, float(values[k]), rest, sample_time)
        x = phi @ x + older * source(k - whole - 1) + recent * source(k - whole)
    return out
