"""Since when: the onset of a fault with a 95 % interval, and what else a look weighed, kept with the flag.

Given the explanation, an onset a cycles back has the log likelihood ratio of :mod:`softsensor.detection.diagnosis`, size
averaged out. Beforehand every cycle is as likely an onset as every other, and either shape of the named instrument (step,
ramp) as likely as the other; so afterwards::

    p(a, shape) proportional to exp(score(a, shape)),   a = 1 ... count, every cycle of the innovations that are kept

The interval leaves 2.5 % to either side. A step from before all that is kept stands for as many cycles again. Where more
than 2.5 % lies on the oldest onset that can be looked at or before, the interval has no beginning. Between the
likely ends of a look's grid every cycle is weighed, once per flag; so the interval is as fine as the cycles.

Source: the change point's posterior of a Gaussian linear model, as in Bernardo & Smith, Bayesian Theory (1994), ch. 5;
Smith, A. F. M., Biometrika 62 (1975) 407-416, for one change and a flat prior on its place (from memory).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from softsensor.detection.detection_design import DetectionDesign, explanations
from softsensor.detection.diagnosis import (
    FINEST,
    Likelihoods,
    Verdict,
    onset_ages,
    recent,
    score_of,
    score_of_older,
    sharp_ages,
)
from softsensor.detection.state_of_tests import TestState
from softsensor.estimation.elementary import exponential, logarithm
from softsensor.estimation.kernel import Floats, Ints

TAIL = 0.025
"""Probability left to either side of the interval."""
UNLIKELY = 25.0
"""Onsets whose log likelihood ratio lies so far below the best one's on the grid of a look, and all beyond them, are not
weighed cycle by cycle: together they have less than a millionth."""
LEAST_TOLD = 0.001
"""An explanation less probable than this is not kept with the flag; "nothing" always is."""


class Account(NamedTuple):
    """What is kept of a look besides its verdict; ages in cycles, 1 is the newest cycle."""

    earliest: int | None
    """Age of the onset interval's beginning; None where it has none, or where there is no interval."""
    latest: int | None
    """Age of its end; None where there is no interval."""
    hypotheses: tuple[tuple[str, float], ...]
    """Explanations with their probabilities, most probable first."""

    def onset_from(self, now: int, sample_us: int) -> int | None:
        """The interval's beginning, UTC microseconds, ``now`` the time of the newest cycle."""
        return None if self.earliest is None else now - (self.earliest - 1) * sample_us

    def onset_to(self, now: int, sample_us: int) -> int | None:
        """The interval's end, UTC microseconds."""
        return None if self.latest is None else now - (self.latest - 1) * sample_us


NO_ACCOUNT = Account(None, None, ())
"""Of a verdict that has no such account: from averages over blocks."""


def account_of(
    design: DetectionDesign, tests: TestState, use: Ints, verdict: Verdict, found: Likelihoods
) -> Account:
    """The account of a look at single cycles. A transfer function's gain has no interval: its onsets are too few."""
    told = tuple(
        (name, probability)
        for name, probability in zip(verdict.names, verdict.probabilities, strict=True)
        if probability >= LEAST_TOLD or name == "nothing"
    )
    suspect = explanations(design)[verdict.best]
    if suspect.source == "gain":
        return Account(None, None, told)
    shapes = np.array([h for h, item in enumerate(design.suspects) if item.name == suspect.name])
    earliest, latest = _interval(design, tests, use, shapes)
    age = int(found.age[verdict.best])
    return Account(None if earliest == 0 else max(earliest, age), min(latest, age), told)


def _interval(design: DetectionDesign, tests: TestState, use: Ints, shapes: Ints) -> tuple[int, int]:
    """Ages of the interval's ends under the explanations ``shapes``; 0 for a beginning that is open."""
    steady, table = design.table(use)
    newest = int(tests.cycle[0]) - 1
    available = max(min(newest + 1 - int(tests.valid_from[0]), design.window), 1)
    remembered = max(min(newest + 1, design.window), 1)
    count = remembered if tests.resumed[0] != 0 else available
    eps, whole = np.zeros((count, tests.ring.shape[1])), np.ones(count, dtype=np.int64)
    recent(tests.ring, newest, steady.whitening, use, count, eps, whole)
    counted = whole.copy()
    counted[: count - available] = 0
    suspects = [design.suspects[h] for h in shapes]
    older = np.array([int(available == design.window and item.shape == "step") for item in suspects])
    prior_sd = np.array([item.prior_sd for item in suspects])
    grid = np.union1d(onset_ages(count), sharp_ages(tests.ring, newest, steady.sd, available))
    chosen = np.zeros(count, dtype=np.int64)
    chosen[grid - 1] = 1
    rough = onset_scores(table[shapes], prior_sd, eps, counted, older, chosen)[:, :count].max(axis=0)
    likely = np.flatnonzero(rough[grid - 1] > rough.max() - UNLIKELY)
    first, last = grid[max(likely[0] - 1, 0)], grid[min(likely[-1] + 1, len(grid) - 1)]
    chosen[first - 1 : last] = 1
    scores = onset_scores(table[shapes], prior_sd, eps, counted, older, chosen)
    earliest, latest = onset_span(scores)
    while 0 < earliest < available and whole[count - earliest - 1] == 0:
        earliest += 1  # a cycle without all readings tells nothing of an onset in it
    return earliest, latest


@njit(cache=True)
def onset_scores(
    table: Floats, prior_sd: Floats, eps: Floats, whole: Ints, older: Ints, chosen: Ints
) -> Floats:
    """(shapes, count + 1) log likelihood ratio of an onset 1 ... count cycles back; last: long before, where ``older``.

    Only the ages that are 1 in ``chosen`` (count,) are looked at; the others get next to nothing.
    """
    n, count = table.shape[0], eps.shape[0]
    scores = np.full((n, count + 1), -1e300)
    for h in range(n):
        precision = 1.0 / (prior_sd[h] * prior_sd[h])
        for age in range(1, count + 1 + older[h]):
            if age <= count and chosen[age - 1] == 0:
                continue
            if age <= count:
                numerator, denominator = score_of(table[h], eps, whole, age)
            else:
                numerator, denominator = score_of_older(table[h, -1], eps, whole)
            scores[h, age - 1] = 0.5 * numerator * numerator / (denominator + precision) - 0.5 * logarithm(
                1.0 + denominator / precision
            )
    return scores


@njit(cache=True)
def onset_span(scores: Floats) -> tuple[int, int]:
    """Earliest and latest age with TAIL beyond each, of (shapes, count + 1) scores; earliest 0: it has no beginning.

    Scores are scaled down so that the largest is FINEST at most, as a verdict's are.
    """
    n, count = scores.shape[0], scores.shape[1] - 1
    top = scores.max()
    temper = min(1.0, FINEST / top) if top > 0.0 else 1.0
    weights = np.zeros(count + 1)
    total = 0.0
    for a in range(count + 1):
        span = float(count) if a == count else 1.0
        for h in range(n):
            if scores[h, a] > -1e299:
                weights[a] += span * exponential((scores[h, a] - top) * temper)
        total += weights[a]
    latest, beyond = 0, 0.0
    while latest < count and beyond + weights[latest] <= TAIL * total:
        beyond += weights[latest]
        latest += 1
    beyond = weights[count] + weights[count - 1]
    if beyond > TAIL * total:
        return 0, min(latest + 1, count)
    earliest = count - 1
    while beyond + weights[earliest - 1] <= TAIL * total:
        beyond += weights[earliest - 1]
        earliest -= 1
    return earliest, latest + 1
