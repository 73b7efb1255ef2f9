"""The cumulative-sum test on standardised innovations: two sums per sensor, one step per cycle.

::

    z    <- the standardised innovation, clipped to [-clip, clip]
    high <- min(cap, max(0, high + z - k))        low <- min(cap, max(0, low - z - k))

k is the reference value; a flag goes up when a sum exceeds the decision interval h (ISO 7870-4, Page
1954). The clip keeps one spike from looking like a shift; the cap, above h, keeps the sums bounded while a
fault lasts, so that they come down again when it has gone. A cycle without an innovation (nan) leaves the
sums as they are. Addition, subtraction and comparison in a fixed order, no fastmath: the same bits on
every machine.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from plant_models.errors import Problem
from softsensor.estimation.compiling import uncounted


@uncounted
def cusum_step(
    high: float, low: float, z: float, reference: float, clip: float, cap: float
) -> tuple[float, float]:
    """One cycle of both sums.

    :param high, low: sums before the cycle, in [0, cap].
    :param z: standardised innovation; nan where there is none.
    :param reference: reference value k.
    :param clip: largest size of z that counts; inf for no clipping.
    :param cap: largest value of a sum, above the decision interval; inf for none.
    """
    if math.isnan(z):
        return high, low
    if z > clip:
        z = clip
    elif z < -clip:
        z = -clip
    high = high + z - reference
    low = low - z - reference
    if not high > 0.0:
        high = 0.0
    elif high > cap:
        high = cap
    if not low > 0.0:
        low = 0.0
    elif low > cap:
        low = cap
    return high, low


@dataclass(frozen=True, eq=False)
class CusumTrace:
    """Both sums over a series, in the unit of the values, and where each first passed the interval (index
    or None).
    """

    high: NDArray[np.float64]
    low: NDArray[np.float64]
    first_high: int | None
    first_low: int | None


def cusum(
    values: ArrayLike, target: float, reference: float, interval: float, clip: float = math.inf
) -> CusumTrace:
    """Run the test over a whole series from zero sums, without a cap.

    >>> trace = cusum([0.2, 1.6, 2.5, 3.0], target=0.0, reference=0.5, interval=4.0)
    >>> trace.high.round(3).tolist(), trace.first_high
    ([0.0, 1.1, 3.1, 5.6], 3)

    :param values: (n,) readings, nan where missing.
    :param target: the value that they should have.
    :param reference, interval, clip: in the unit of the values.
    :raises Problem: values that are not a series, or settings that are not positive numbers.
    """
    series = np.asarray(values, dtype=np.float64)
    if series.ndim != 1:
        raise Problem(
            f"a cumulative sum needs a series of values, not an array with {series.ndim} dimensions"
        )
    if not (math.isfinite(target) and reference >= 0.0 and interval > 0.0 and clip > reference):
        raise Problem(
            "a cumulative sum needs a finite target, a reference value from zero up, a "
            "positive interval and a clip "
            "above the reference value"
        )
    high, low = np.zeros(series.size), np.zeros(series.size)
    sums = (0.0, 0.0)
    for k, value in enumerate(series):
        sums = cusum_step(sums[0], sums[1], value - target, reference, clip, math.inf)
        high[k], low[k] = sums
    return CusumTrace(high, low, _first_above(high, interval), _first_above(low, interval))


def _first_above(sums: NDArray[np.float64], interval: float) -> int | None:
    above = np.nonzero(sums > interval)[0]
    return int(above[0]) if above.size else None
