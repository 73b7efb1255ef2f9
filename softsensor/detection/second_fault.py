"""Is there another fault beside those that are flagged already, on instruments that still count?

A flagged error that is not left out keeps sums up for as long as it lasts, also those of healthy sensors. To see another
fault beside it, what the flagged ones can have left is taken out of the innovations: with q_1 ... q_r orthonormal vectors
that span the signatures (step and ramp) of every flagged instrument from its onset on, whitened innovations e and a
signature v of another explanation::

    e' = e - sum (q_r' e) q_r,   N = v' e',   D = v' v - sum (q_r' v)^2

and the likelihood ratio as ever (:mod:`softsensor.detection.diagnosis`): generalised least squares with the flagged errors'
sizes free. Signatures are good to a few per cent, so a second fault must explain SHARE of what the flagged ones do.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.diagnosis import Likelihoods, Verdict, judge, onset_ages, recent, sharp_ages
from softsensor.detection.flags import Flag
from softsensor.detection.state_of_tests import TestState
from softsensor.estimation.elementary import exponential, logarithm
from softsensor.estimation.kernel import Floats, Ints

SHARE = 0.05
"""Of the log evidence for the flagged errors that a further one must have."""
PARALLEL = 1e-9
"""What is left of a signature's square, as a share, below which the flagged ones say the same."""


class Beside(NamedTuple):
    """A look beside flagged errors; ``share``: the best explanation has its share of the evidence."""

    verdict: Verdict
    found: Likelihoods
    share: bool


def look_beside(
    design: DetectionDesign, tests: TestState, use: Ints, flags: tuple[Flag, ...], time: int
) -> Beside | None:
    """Weigh explanations beside the flagged ones, at the cycle of ``time``.

    None where a flagged one is not named alone, or has no signature, such as a stuck sensor or a gain.
    """
    if not all(flag.isolated for flag in flags):
        return None
    steady, table = design.table(use)
    newest = int(tests.cycle[0]) - 1
    count = max(min(newest + 1 - int(tests.valid_from[0]), design.window), 1)
    known = _known(design, table, count, flags, time)
    if known is None:
        return None
    eps, whole = np.zeros((count, tests.ring.shape[1])), np.ones(count, dtype=np.int64)
    recent(tests.ring, newest, steady.whitening, use, count, eps, whole)
    ages = np.union1d(onset_ages(count), sharp_ages(tests.ring, newest, steady.sd, count))
    prior_sd = np.array([suspect.prior_sd for suspect in design.suspects])
    flagged = {flag.tag for flag in flags}
    others = np.array([int(item.name not in flagged) for item in design.suspects], dtype=np.int64)
    taken = take_out(known, eps, whole)
    found = Likelihoods(*beside(table, prior_sd, eps, whole, known, ages, others))
    verdict = judge(design.suspects, found)
    share = verdict.best >= 0 and float(found.evidence[verdict.best]) >= SHARE * taken
    return Beside(verdict, found, share)


def _known(
    design: DetectionDesign, table: Floats, count: int, flags: tuple[Flag, ...], time: int
) -> Floats | None:
    """(r, count, n_sensors) signatures of the flagged instruments over the last ``count`` cycles."""
    rows = []
    for flag in flags:
        shapes = [h for h, item in enumerate(design.suspects) if item.name == flag.tag]
        if not shapes:
            return None
        age = int((time - flag.onset) // design.sample_us) + 1
        for h in shapes:
            row = np.zeros((count, table.shape[2]))
            if age <= min(count, table.shape[1]):
                row[count - age :] = table[h, :age]
            else:
                growth = (
                    np.arange(count, dtype=np.float64)[:, None] if design.suspects[h].shape == "ramp" else 1.0
                )
                row[:] = table[shapes[0], -1] * growth
            rows.append(row)
    return np.array(rows)


@njit(cache=True)
def take_out(known: Floats, eps: Floats, whole: Ints) -> float:
    """Make ``known`` (r, count, m) orthonormal over whole cycles and take them out of ``eps`` (count, m), both in place.

    Returns half the sum of squares taken out: the log evidence of what is known. A row that says nothing new becomes zero.
    """
    rows, count, m = known.shape
    for r in range(rows):
        for k in range(count):
            if whole[k] == 0:
                known[r, k] = 0.0
        before = _dot(known[r], known[r])
        for s in range(r):
            _subtract(known[r], known[s], _dot(known[r], known[s]))
        after = _dot(known[r], known[r])
        factor = 1.0 / np.sqrt(after) if after > PARALLEL * before else 0.0
        for k in range(count):
            for i in range(m):
                known[r, k, i] *= factor
    taken = 0.0
    for r in range(rows):
        along = _dot(eps, known[r])
        _subtract(eps, known[r], along)
        taken += 0.5 * along * along
    return taken


@njit(cache=True)
def _dot(a: Floats, b: Floats) -> float:
    total = 0.0
    for k in range(a.shape[0]):
        for i in range(a.shape[1]):
            total += a[k, i] * b[k, i]
    return total


@njit(cache=True)
def _subtract(a: Floats, b: Floats, factor: float) -> None:
    for k in range(a.shape[0]):
        for i in range(a.shape[1]):
            a[k, i] -= factor * b[k, i]


@njit(cache=True)
def score_beside(signature: Floats, eps: Floats, whole: Ints, known: Floats, age: int) -> tuple[float, float]:
    """N and D of one signature over the last ``age`` cycles, beside the orthonormal ``known``."""
    start, m = eps.shape[0] - age, eps.shape[1]
    numerator, denominator = 0.0, 0.0
    along = np.zeros(known.shape[0])
    for lag in range(age):
        if whole[start + lag] == 0:
            continue
        for i in range(m):
            value = signature[lag, i]
            numerator += value * eps[start + lag, i]
            denominator += value * value
            for r in range(len(along)):
                along[r] += value * known[r, start + lag, i]
    left = denominator
    for r in range(len(along)):
        left -= along[r] * along[r]
    return numerator, left if left > PARALLEL * denominator else 0.0


@njit(cache=True)
def beside(
    table: Floats, prior_sd: Floats, eps: Floats, whole: Ints, known: Floats, ages: Ints, others: Ints
) -> tuple[Floats, Ints, Floats, Floats]:
    """As :func:`softsensor.detection.diagnosis.likelihoods`, beside what is known; only where ``others`` is 1."""
    n = table.shape[0]
    evidence, best_age = np.full(n, -1e300), np.ones(n, dtype=np.int64)
    size, size_sd = np.zeros(n), np.ones(n)
    for h in range(n):
        if others[h] == 0:
            continue
        precision = 1.0 / (prior_sd[h] * prior_sd[h])
        scores = np.zeros(len(ages))
        for a in range(len(ages)):
            numerator, denominator = score_beside(table[h], eps, whole, known, ages[a])
            scores[a] = 0.5 * numerator * numerator / (denominator + precision) - 0.5 * logarithm(
                1.0 + denominator / precision
            )
            if a == 0 or scores[a] > evidence[h]:
                evidence[h], best_age[h] = scores[a], ages[a]
                size[h] = numerator / (denominator + precision)
                size_sd[h] = np.sqrt(1.0 / (denominator + precision))
        total = 0.0
        for a in range(len(scores)):
            total += exponential(scores[a] - evidence[h])
        evidence[h] += logarithm(total / len(scores))
    return evidence, best_age, size, size_sd
