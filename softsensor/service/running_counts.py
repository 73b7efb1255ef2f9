"""What a summary adds up of each sensor, compiled: cycle by cycle, the same however the cycles come in pieces."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from softsensor.cycle_results import CycleResults
from softsensor.detection.shift_tests import DOWN
from softsensor.estimation.compiling import uncounted
from softsensor.estimation.kernel import Floats, Ints


class Counts(NamedTuple):
    """All (n_sensors,). Of readings used, with z the innovation over its sd: count, sum of z^2; pairs of cycles that both
    have one, sum of their products, the last cycle's z (nan where none); runs of the sums above their interval, and 1 while
    one lasts, which it does until they are below DOWN.
    """

    readings: Ints
    squares: Floats
    pairs: Ints
    products: Floats
    last: Floats
    runs: Ints
    up: Ints


def no_counts(n_sensors: int) -> Counts:
    """Before the first cycle."""

    def ints() -> Ints:
        return np.zeros(n_sensors, dtype=np.int64)

    return Counts(
        ints(),
        np.zeros(n_sensors),
        ints(),
        np.zeros(n_sensors),
        np.full(n_sensors, np.nan),
        ints(),
        ints(),
    )


def count(counts: Counts, results: CycleResults) -> None:
    """Add these cycles, in place."""
    _count(
        counts,
        results.innovation,
        results.innovation_sd,
        results.used,
        results.high,
        results.low,
        results.left_out,
    )


@uncounted
def _count(
    counts: Counts,
    innovation: Floats,
    sd: Floats,
    used: NDArray[np.int8],
    high: Floats,
    low: Floats,
    left_out: NDArray[np.int8],
) -> None:
    for k in range(innovation.shape[0]):
        for i in range(innovation.shape[1]):
            z = innovation[k, i] / sd[k, i] if used[k, i] != 0 else np.nan
            product = z * counts.last[i]
            counts.last[i] = z
            if z == z:
                counts.readings[i] += 1
                counts.squares[i] += z * z
            if product == product:
                counts.pairs[i] += 1
                counts.products[i] += product
            top = 0.0 if left_out[k, i] != 0 else max(high[k, i], low[k, i])
            if counts.up[i] == 0 and top > 1.0:
                counts.runs[i] += 1
                counts.up[i] = 1
            elif top < DOWN:
                counts.up[i] = 0
