"""Cumulative sums on squares: has the noise grown, and do all innovations together still fit?

For standardised values that are N(0, 1) without a fault and N(0, ratio^2) with one, the log likelihood ratio of n of them
with sum of squares q is gain * q - n * drift, gain = (1 - ratio^-2) / 2, drift = ln ratio. The sum of these, never
below zero, is up when it exceeds the interval (Page 1954; Hawkins & Olwell, Cumulative Sum Charts, 1998, ch. 4: from
memory). The run length comes from a Markov chain on cells of the sum (Brook & Evans, Biometrika 59 (1972) 539-549),
extrapolated from two cell widths.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_toeplitz
from scipy.optimize import brentq
from scipy.special import gammainc

from softsensor.detection.run_length import RunLengthError

Vector = NDArray[np.float64]
CELLS = 300
LONGEST_INTERVAL = 80.0


def gain_and_drift(ratio: float) -> tuple[float, float]:
    """What one squared value adds and what one value takes off, for a noise ``ratio`` times the right one.

    >>> [round(part, 4) for part in gain_and_drift(1.5)]
    [0.2778, 0.4055]
    """
    return 0.5 * (1.0 - ratio**-2), math.log(ratio)


def spread_run_length(ratio: float, count: int, interval: float, clip: float = math.inf) -> float:
    """Mean number of steps until the sum exceeds ``interval`` without a fault, ``count`` values a step, from zero.

    :param clip: a single value (count = 1) counts up to this size.
    """
    coarse, fine = (_chain(ratio, count, interval, clip, cells) for cells in (CELLS, 2 * CELLS))
    return math.exp(2.0 * math.log(fine) - math.log(coarse))


def spread_interval(ratio: float, count: int, run_length: float, clip: float = math.inf) -> float:
    """The interval whose mean run length without a fault is ``run_length`` steps.

    :raises RunLengthError: there is none up to LONGEST_INTERVAL.
    """
    return _interval(float(ratio), int(count), float(run_length), float(clip))


@lru_cache(maxsize=64)
def _interval(ratio: float, count: int, run_length: float, clip: float) -> float:
    def excess(interval: float) -> float:
        return math.log(spread_run_length(ratio, count, interval, clip) / run_length)

    low, high = 0.25, math.log(max(run_length, 3.0)) + 1.0
    if excess(low) >= 0.0 or high > LONGEST_INTERVAL:
        raise RunLengthError(f"no noise test has a run length of {run_length:g} steps")
    while excess(high) < 0.0:
        low, high = high, high + 2.0
        if high > LONGEST_INTERVAL:
            raise RunLengthError(f"no noise test has a run length of {run_length:g} steps")
    return float(brentq(excess, low, high, xtol=1e-6))


def _chain(ratio: float, count: int, interval: float, clip: float, cells: int) -> float:
    """Run length from zero; cell 0 is the sum at zero, cell j has its middle at j * width."""
    gain, drift = gain_and_drift(ratio)
    width = interval / (cells + 0.5)

    def below(change: Vector) -> Vector:
        """Probability that a step adds no more than ``change``; what the clip heaps up is spread over one cell."""
        squares = np.clip((change + count * drift) / gain, 0.0, clip * clip)
        heap = 1.0 - float(gammainc(0.5 * count, 0.5 * clip * clip))
        share = gammainc(0.5 * count, 0.5 * squares)
        if heap > 0.0:
            largest = gain * clip * clip - count * drift
            share = share + heap * np.clip((change - largest) / width + 0.5, 0.0, 1.0)
        return np.asarray(share, dtype=np.float64)

    steps: Vector = np.arange(-cells, cells + 1, dtype=np.float64) * width
    reach = below(steps + 0.5 * width) - below(steps - 0.5 * width)
    # cells 1 .. cells among themselves are Toeplitz; cell 0 collects what would fall below it
    column, row = reach[cells::-1][:cells].copy(), reach[cells:][:cells].copy()
    column[0] = row[0] = 1.0 - reach[cells]
    column[1:], row[1:] = -column[1:], -row[1:]
    into_zero = below(0.5 * width - steps[cells + 1 :])
    right = np.column_stack((np.ones(cells), into_zero))
    inner = solve_toeplitz((column, row), right)
    from_zero = reach[cells + 1 :]
    stay = float(below(np.array([0.5 * width]))[0])
    return float((1.0 + from_zero @ inner[:, 0]) / (1.0 - stay - from_zero @ inner[:, 1]))
