"""The factor on an estimate's published sd with which its 95 % interval keeps its promise, from laboratory results.

Split conformal prediction (Papadopoulos et al. 2002; Lei et al., J. Am. Stat. Assoc. 113 (2018) 1094-1111): each result
that the fit has not seen, against the estimate as published before it was used, has a score: the smallest factor k
with which its interval would have held it::

    |error| <= 1.96 sqrt(k^2 P + R)

P the variance of the estimate, R that of the result. The ceil(0.95 (n + 1))-th smallest of n scores covers a further
result with a probability of at least 0.95 and at most 0.95 + 1/(n + 1), whatever the errors' distribution, as long as
the results are exchangeable. One result in twenty may be as wrong as it likes.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from scipy.stats import beta

from softsensor.estimation.kernel import Floats
from softsensor.estimation.noise_tuning.separability import NORMAL_95

LEVEL = 0.95
LEAST_RESULTS = 40
"""With fewer, one wrong result would set the factor by itself."""

SURE_RESULTS = 200
"""With fewer the factor is too uncertain to be taken where the results agree with the promise as it is: at 200 the
coverage that it leads to lies within 3 % of 95 % nineteen times in twenty."""


class Scores(NamedTuple):
    """Errors of laboratory results against their predictions, variances of the estimate and of the result; all (n,)."""

    error: Floats
    estimate_variance: Floats
    result_variance: Floats

    def inside(self, scale: float) -> int:
        """How many results lie inside the 95 % interval with this factor on the estimate's sd."""
        return int(np.count_nonzero(np.abs(self.error) <= self.half_width(scale) * (1.0 + 1e-12)))

    def half_width(self, scale: float) -> Floats:
        """Half of the 95 % interval of each error (n,) with this factor on the estimate's sd."""
        spread = np.sqrt(scale**2 * self.estimate_variance + self.result_variance)
        return np.asarray(NORMAL_95 * spread, dtype=np.float64)


def conformal_scale(scores: Scores) -> float:
    """The factor; 0 where the results' own noise explains their errors; nan with fewer than LEAST_RESULTS results."""
    n = len(scores.error)
    if n < LEAST_RESULTS:
        return math.nan
    excess = (scores.error / NORMAL_95) ** 2 - scores.result_variance
    factor = np.sqrt(np.maximum(excess, 0.0) / scores.estimate_variance)
    return float(np.sort(factor)[math.ceil(LEVEL * (n + 1)) - 1])


def share_interval(hits: int, count: int) -> tuple[float, float]:
    """Exact 95 % interval of a share from ``hits`` of ``count`` (Clopper & Pearson 1934).

    >>> [round(end, 4) for end in share_interval(0, 10)]
    [0.0, 0.3085]
    """
    tail = 0.5 * (1.0 - LEVEL)
    low = 0.0 if hits == 0 else float(beta.ppf(tail, hits, count - hits + 1))
    high = 1.0 if hits == count else float(beta.ppf(1.0 - tail, hits + 1, count - hits))
    return low, high
