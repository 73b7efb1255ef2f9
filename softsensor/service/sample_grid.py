"""The instants at which cycles run, in integer UTC microseconds.

Where the sample time divides a day, cycles lie on whole multiples of the sample time since 1970, so that two
people name the same grid without asking. Otherwise the grid starts where the readings (replay) or the service
(live) start.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from softsensor.errors import ReplayError

MICROSECONDS = 1_000_000
DAY = 86_400 * MICROSECONDS


def sample_time_in_microseconds(sample_time: float) -> int:
    """The sample time (seconds) as whole microseconds.

    :raises ReplayError: it is not a whole, positive number of microseconds.

    >>> sample_time_in_microseconds(0.1)
    100000
    """
    exact = sample_time * MICROSECONDS
    whole = round(exact) if math.isfinite(exact) else 0
    if whole < 1 or abs(exact - whole) > 1e-6 + 1e-12 * exact:
        raise ReplayError(
            f"sample_time: {sample_time!r} s is not a whole number of microseconds, on which cycles lie"
        )
    return whole


def first_cycle_time(start: int, sample_time: int) -> int:
    """The first cycle at or after ``start``: the next multiple of the sample time, else ``start``.

    Multiples where the sample time divides a day. Both in microseconds. Times before 1970 are negative and
    lie on the same grid.

    >>> first_cycle_time(12_000_000, 10_000_000), first_cycle_time(12_000_000, 7_000_000)
    (20000000, 12000000)
    """
    if DAY % sample_time == 0:
        return -(-start // sample_time) * sample_time
    return start


def cycle_times(first: int, last: int, sample_time: int) -> NDArray[np.int64]:
    """Every cycle from ``first`` (on the grid) to the last not after ``last``; (N,) microseconds."""
    count = max(0, (last - first) // sample_time + 1)
    return first + sample_time * np.arange(count, dtype=np.int64)
