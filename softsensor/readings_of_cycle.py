"""What cycles see: inputs and sensor readings, after every decision that needed a clock has been taken."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray


class CycleQuality(IntEnum):
    """What a cycle knows of one tag.

    ========== ============================================ ==============================================
    code       a sensor's reading                           an input's value
    ========== ============================================ ==============================================
    GOOD       new and Good                                 its last value was Good
    UNCERTAIN  new and Uncertain                            its last value was Uncertain
    BAD        the newest is Bad or not finite; y is nan    the newest is Bad; the value before it is held
    MISSING    none yet, or none newer than the one used    it never had a value; u is nan
    STALE      the newest is too old; y is nan              the value is too old and still held
    UNMAPPED   the tag's transform has no value for the     as BAD
               newest (log of zero, say); y is nan
    ========== ============================================ ==============================================
    """

    GOOD = 0
    UNCERTAIN = 1
    BAD = 2
    MISSING = 3
    STALE = 4
    UNMAPPED = 5


@dataclass(frozen=True)
class CycleReadings:
    """The readings of N consecutive cycles, all arrays C-contiguous.

    Shapes: times (N,) int64 UTC microseconds; u (N, n_inputs) and y (N, n_sensors) float64 in engineering
    units, nan where there is none; u_quality and y_quality int8 of the same shapes, codes of
    :class:`CycleQuality`.
    """

    times: NDArray[np.int64]
    u: NDArray[np.float64]
    u_quality: NDArray[np.int8]
    y: NDArray[np.float64]
    y_quality: NDArray[np.int8]

    def __len__(self) -> int:
        return int(self.times.shape[0])


def slice_readings(readings: CycleReadings, start: int, stop: int) -> CycleReadings:
    """Rows start to stop of some cycles' readings."""
    return CycleReadings(
        readings.times[start:stop],
        readings.u[start:stop],
        readings.u_quality[start:stop],
        readings.y[start:stop],
        readings.y_quality[start:stop],
    )


def join_readings(parts: Sequence[CycleReadings]) -> CycleReadings:
    """The readings of consecutive stretches as one."""
    return CycleReadings(
        np.concatenate([part.times for part in parts]),
        np.concatenate([part.u for part in parts]),
        np.concatenate([part.u_quality for part in parts]),
        np.concatenate([part.y for part in parts]),
        np.concatenate([part.y_quality for part in parts]),
    )
