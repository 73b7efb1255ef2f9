"""A bank of clipped cumulative sums over many series at once, in plain numpy: a second computation of what is found when."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


class SumBank:
    """Both directions of every pair (k, h) over ``runs`` series side by side."""

    def __init__(self, references: tuple[float, ...], intervals: tuple[float, ...], clip: float, runs: int):
        self.k = np.array(references)[:, None]
        self.h = np.array(intervals)[:, None]
        self.clip = clip
        self.high = np.zeros((len(references), runs))
        self.low = np.zeros((len(references), runs))

    def step(self, z: Floats) -> NDArray[np.bool_]:
        """One cycle of standardised innovations (runs,); which pairs (pairs, runs) are beyond their interval?"""
        held = np.clip(z, -self.clip, self.clip)
        self.high = np.maximum(0.0, self.high + held - self.k)
        self.low = np.maximum(0.0, self.low - held - self.k)
        return (self.high > self.h) | (self.low > self.h)


def first_found(
    bank: SumBank, means: Floats, rng: np.random.Generator, warm_up: int = 1500
) -> NDArray[np.int64]:
    """Cycle (from 1) at which each series without a false flag before its onset is first found; -1 for never.

    ``means`` (cycles,): the mean of the standardised innovation from the onset on.
    """
    runs = bank.high.shape[1]
    fresh = np.ones(runs, dtype=bool)
    for _ in range(warm_up):
        fresh &= ~bank.step(rng.standard_normal(runs)).any(axis=0)
    found = np.full(runs, -1)
    for cycle, mean in enumerate(means, start=1):
        up = bank.step(mean + rng.standard_normal(runs)).any(axis=0)
        found[up & (found < 0)] = cycle
    return found[fresh]
