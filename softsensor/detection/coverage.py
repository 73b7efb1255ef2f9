"""Do laboratory results still lie inside the interval as often as promised? A cumulative sum of hits and misses.

Each result, predicted before it is used, lies inside its 95 % interval (a hit) or outside (a miss). The sum of the
Bernoulli scheme [Reynolds & Stoumbos 1999, from memory] in whole numbers: S <- max(0, S - 1) at a hit, S + MISS at a miss;
it tells at LIMIT and begins anew. The ratio of the steps is that of the log-likelihoods of 5 % and of 16 % misses,
ln(0.16/0.05) / ln(0.95/0.84) = 9.5. In whole numbers the mean count of results between two false alarms is exact: see
:func:`run_length`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

MISS = 9
LIMIT = 30
PROMISED_MISSES = 0.05


def alarms(misses: Sequence[bool]) -> list[int]:
    """Places at which the sum reaches its limit.

    >>> alarms([False] * 30 + [True] * 5 + [False])
    [33]
    """
    found, total = [], 0
    for place, miss in enumerate(misses):
        total = total + MISS if miss else max(total - 1, 0)
        if total >= LIMIT:
            found.append(place)
            total = 0
    return found


def run_length(share: float, limit: int = LIMIT) -> float:
    """Mean count of results to an alarm where a share of them are misses: L = 1 + P L over the sums below the limit."""
    P = np.zeros((limit, limit))
    for total in range(limit):
        P[total, max(total - 1, 0)] += 1.0 - share
        if total + MISS < limit:
            P[total, total + MISS] += share
    return float(np.linalg.solve(np.eye(limit) - P, np.ones(limit))[0])
