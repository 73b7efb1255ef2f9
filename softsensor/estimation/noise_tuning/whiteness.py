"""Are standardised innovations white? Correlations over lags, and the cumulative periodogram with its bounds.

A right model leaves independent N(0, 1). Gaps are nan: correlations leave them out pair by pair, the periodogram takes
them as the mean.

The cumulative periodogram of m ordinates is s_j, the share of the power at the j lowest frequencies. Of white noise
s_1 ... s_{m-1} are distributed as m - 1 ordered uniform numbers, so that its largest distance from a straight line has
Kolmogorov's distribution (Durbin, Biometrika 56 (1969) 1-15).
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from scipy.stats import kstwo

from softsensor.estimation.kernel import Floats

NORMAL_95 = 1.959963984540054
LEVEL = 0.05
"""White innovations leave the bounds of the cumulative periodogram so often; those of one lag too."""
LEAST = 10
"""Readings below which nothing is worked out."""


class Correlations(NamedTuple):
    """Correlation at lags 1 ... L, all (L,), and the bounds that a lag of white innovations leaves once in twenty; nan
    where there are no pairs.
    """

    value: Floats
    bound: Floats


class CumulativePeriodogram(NamedTuple):
    """Share of the power (q,) at frequencies up to ``frequency`` (q,), in cycles per sample, 0 to 0.5; the largest distance
    from the straight line of white noise, and the bound that it leaves once in twenty. Empty and nan below LEAST readings.
    """

    frequency: Floats
    share: Floats
    distance: float
    bound: float


def correlations(z: Floats, lags: int) -> Correlations:
    """Mean products of standardised innovations (n,) at lags 1 ... L over their mean square, without taking off a mean.

    >>> [round(float(r), 2) for r in correlations(np.array([1.0, -1.0] * 6), 2).value]
    [-1.0, 1.0]
    """
    value, bound = np.full(lags, math.nan), np.full(lags, math.nan)
    present = z[np.isfinite(z)]
    square = float(np.mean(present**2)) if len(present) >= LEAST else 0.0
    for lag in range(1, lags + 1):
        products = z[lag:] * z[:-lag]
        products = products[np.isfinite(products)]
        if len(products) and square > 0.0:
            value[lag - 1] = float(np.mean(products)) / square
            bound[lag - 1] = NORMAL_95 / math.sqrt(len(products))
    return Correlations(value, bound)


def cumulative_periodogram(z: Floats) -> CumulativePeriodogram:
    """The cumulative periodogram of innovations (n,) about their mean."""
    found = np.isfinite(z)
    if found.sum() < LEAST:
        return CumulativePeriodogram(np.zeros(0), np.zeros(0), math.nan, math.nan)
    filled = np.where(found, z - np.mean(z[found]), 0.0)
    ordinates = (len(z) - 1) // 2
    power = np.abs(np.fft.rfft(filled)[1 : ordinates + 1]) ** 2
    total = float(np.sum(power))
    if total <= 0.0:
        return CumulativePeriodogram(np.zeros(0), np.zeros(0), math.nan, math.nan)
    share = np.cumsum(power) / total
    frequency = np.arange(1, ordinates + 1) / len(z)
    bound = white_bound(ordinates)
    return CumulativePeriodogram(frequency, share, _distance(share[:-1]), bound)


def white_bound(ordinates: int) -> float:
    """The distance that white noise exceeds once in twenty.

    Of 10 uniform numbers 0.409, as tables of Kolmogorov's test have it; 1.358 / sqrt(n) for large n.

    >>> round(white_bound(11), 3)
    0.409
    """
    return float(kstwo.ppf(1.0 - LEVEL, ordinates - 1))


def _distance(share: Floats) -> float:
    """Kolmogorov's distance of ordered shares (m - 1,) from uniform ones."""
    n = len(share)
    above = np.arange(1, n + 1) / n - share
    below = share - np.arange(n) / n
    return float(max(above.max(), below.max()))
