"""A sensor's cumulative sums over standardised innovations, for many widths of their decision intervals at once.

The sums are those of softsensor.detection.cusum; a bank is one or more pairs of sums, each with its reference value and
decision interval. With every interval f times as wide the bank goes up when the largest of its sums, each over its own
interval, passes f, and comes down below f / 2, as in softsensor.detection.fault_tests.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit

from softsensor.detection.cusum import cusum_step
from softsensor.estimation.kernel import Floats, Ints


@dataclass(frozen=True)
class Bank:
    """One sensor's pairs of sums: reference values and decision intervals (n_pairs,), in standard deviations."""

    reference: Floats
    interval: Floats
    clip: float


@njit(cache=True)
def _count(
    z: Floats,
    reference: Floats,
    interval: Floats,
    clip: float,
    factors: Floats,
    high: Floats,
    low: Floats,
    up: Ints,
    counts: Ints,
    up_cycles: Ints,
) -> None:
    pairs, widths = len(reference), len(factors)
    widest = factors[widths - 1]
    highest_up = 0
    for j in range(widths):
        if up[j] != 0:
            highest_up = j + 1
    for k in range(len(z)):
        if z[k] != z[k]:
            continue
        top = 0.0
        for p in range(pairs):
            cap = 2.0 * widest * interval[p]
            high[p], low[p] = cusum_step(high[p], low[p], z[k], reference[p], clip, cap)
            top = max(top, max(high[p], low[p]) / interval[p])
        while highest_up > 0 and top < 0.5 * factors[highest_up - 1]:
            up[highest_up - 1] = 0
            highest_up -= 1
        j = 0
        while j < widths and top > factors[j]:
            if up[j] == 0:
                up[j] = 1
                counts[j] += 1
            j += 1
        highest_up = max(highest_up, j)
        for j in range(highest_up):
            up_cycles[j] += 1


class BankRun:
    """A bank under way over innovations that come in pieces.

    :param factors: widths of the intervals, ascending.
    """

    def __init__(self, bank: Bank, factors: Floats) -> None:
        self._bank = bank
        self.factors = np.ascontiguousarray(factors)
        self._sums = np.zeros((2, len(bank.reference)))
        self._up = np.zeros(len(factors), dtype=np.int64)
        self.counts = np.zeros(len(factors), dtype=np.int64)
        """How often the bank has gone up at each width."""
        self.up_cycles = np.zeros(len(factors), dtype=np.int64)
        """For how many innovations it was up."""
        self.cycles = 0
        """Innovations so far."""

    def add(self, z: Floats) -> None:
        """Run over the next standardised innovations (n,), nan where there is none."""
        bank = self._bank
        high, low = self._sums[0], self._sums[1]
        _count(
            z,
            bank.reference,
            bank.interval,
            bank.clip,
            self.factors,
            high,
            low,
            self._up,
            self.counts,
            self.up_cycles,
        )
        self.cycles += int(np.sum(np.isfinite(z)))
