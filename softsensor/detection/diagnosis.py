"""Which explanation do the innovations favour: likelihoods of every hypothesis, averaged over onsets and sizes.

For a hypothesis with whitened signature v(l), l cycles after its onset, and whitened innovations eps, over the last
a cycles::

    N = sum v(l)' eps,   D = sum v(l)' v(l),   size ~ N(0, p^2) beforehand
    log likelihood ratio against "nothing happened" = N^2 / (2 (D + p^-2)) - ln(1 + p^2 D) / 2
    size afterwards: mean N / (D + p^-2), variance 1 / (D + p^-2)

Sources: Willsky & Jones (1976) for the recursion over signatures; the average over onsets and the prior on the size are
the textbook Bayes factor of a Gaussian linear model (Bernardo & Smith, Bayesian Theory, 1994, ch. 5).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from softsensor.detection.signatures import Hypothesis
from softsensor.estimation.elementary import exponential, logarithm
from softsensor.estimation.kernel import Floats, Ints

NAMING_RATIO = 10.0
"""A single name is given only when it is this many times as probable as all other explanations together."""


SHARPEST = 4
"""Unusual cycles at which onsets are looked for besides the grid."""
FINEST = 1000.0
"""Log evidence beyond this tells no more: signatures are good to a few per cent (the filter has not quite settled, the gate
kept a reading out, a gain is not quite the model's), and of a gross fault's e^14000 a difference of e^10 between two
explanations says nothing."""


class Likelihoods(NamedTuple):
    """Per hypothesis: log of the averaged likelihood ratio, best onset (cycles back), size there, its sd."""

    evidence: Floats
    age: Ints
    size: Floats
    size_sd: Floats


class Verdict(NamedTuple):
    """The outcome of one look: explanations by probability, and the group that cannot be told apart."""

    names: tuple[str, ...]
    """Instruments and disturbances, most probable first; "nothing" stands for none of them."""
    probabilities: tuple[float, ...]
    best: int
    """Index of the most probable hypothesis of the first name; -1 for "nothing"."""
    instrument: float
    """Probability that some instrument is at fault."""
    group: tuple[str, ...]


def named(verdict: Verdict) -> bool:
    """Is one explanation ten times as probable as all others together?"""
    return verdict.best >= 0 and verdict.probabilities[0] * (NAMING_RATIO + 1.0) >= NAMING_RATIO


@njit(cache=True)
def recent(
    ring: Floats, newest: int, whitening: Floats, use: Ints, count: int, out: Floats, whole: Ints
) -> None:
    """The last ``count`` innovations, newest last, whitened; whole[k] = 0 where a reading in use was missing."""
    window, m = ring.shape
    for k in range(count):
        slot = (newest - (count - 1 - k)) % window
        whole[k] = 1
        for i in range(m):
            if use[i] != 0 and ring[slot, i] != ring[slot, i]:
                whole[k] = 0
        for i in range(m):
            total = 0.0
            if whole[k] != 0 and use[i] != 0:
                for j in range(i + 1):
                    if use[j] != 0:
                        total += whitening[i, j] * ring[slot, j]
            out[k, i] = total


@njit(cache=True)
def score_of(signature: Floats, eps: Floats, whole: Ints, age: int) -> tuple[float, float]:
    """N and D over the last ``age`` cycles that are whole."""
    start = eps.shape[0] - age
    numerator, denominator = 0.0, 0.0
    for lag in range(age):
        if whole[start + lag] == 0:
            continue
        for i in range(eps.shape[1]):
            value = signature[lag, i]
            numerator += value * eps[start + lag, i]
            denominator += value * value
    return numerator, denominator


@njit(cache=True)
def score_of_older(left: Floats, eps: Floats, whole: Ints) -> tuple[float, float]:
    """N and D of a constant signature (n_sensors,) over all cycles that are whole."""
    numerator, denominator = 0.0, 0.0
    for k in range(eps.shape[0]):
        if whole[k] == 0:
            continue
        for i in range(eps.shape[1]):
            numerator += left[i] * eps[k, i]
            denominator += left[i] * left[i]
    return numerator, denominator


@njit(cache=True)
def likelihoods(
    table: Floats,
    prior_sd: Floats,
    ring: Floats,
    newest: int,
    whitening: Floats,
    use: Ints,
    ages: Ints,
    scored: int,
    older: Ints,
) -> Likelihoods:
    """Score every hypothesis over the onsets in ``ages`` (cycles back, ascending; the largest sets the window).

    Only the latest ``scored`` cycles count; an onset may lie before them, in an outage for example. ``older`` (n,) is 1
    where one onset more is looked at, so long ago that only what is left in the end shows: the last row of the signature,
    all the time. Its age is given as the largest of ``ages``.
    """
    n, count = table.shape[0], ages[-1]
    eps, whole = np.zeros((count, ring.shape[1])), np.ones(count, dtype=np.int64)
    recent(ring, newest, whitening, use, count, eps, whole)
    whole[: max(count - scored, 0)] = 0
    evidence, best_age = np.full(n, -1e300), np.zeros(n, dtype=np.int64)
    size, size_sd = np.zeros(n), np.zeros(n)
    for h in range(n):
        precision = 1.0 / (prior_sd[h] * prior_sd[h])
        scores = np.zeros(len(ages) + older[h])
        for a in range(len(scores)):
            if a < len(ages):
                numerator, denominator = score_of(table[h], eps, whole, ages[a])
            else:
                numerator, denominator = score_of_older(table[h, -1], eps, whole)
            scores[a] = 0.5 * numerator * numerator / (denominator + precision) - 0.5 * logarithm(
                1.0 + denominator / precision
            )
            if a == 0 or scores[a] > evidence[h]:
                evidence[h], best_age[h] = scores[a], ages[min(a, len(ages) - 1)]
                size[h] = numerator / (denominator + precision)
                size_sd[h] = np.sqrt(1.0 / (denominator + precision))
        total = 0.0
        for a in range(len(scores)):
            total += exponential(scores[a] - evidence[h])
        evidence[h] += logarithm(total / len(scores))
    return Likelihoods(evidence, best_age, size, size_sd)


def onset_ages(available: int) -> Ints:
    """Candidate onsets, in cycles back: every age at first, then about a sixth further each time.

    >>> onset_ages(10).tolist()
    [1, 2, 3, 4, 5, 6, 7, 8, 9, 10]
    """
    ages, age = [], 1
    while age < available:
        ages.append(age)
        age = max(age + 1, age + age // 6)
    return np.array([*ages, max(available, 1)], dtype=np.int64)


def sharp_ages(ring: Floats, newest: int, sd: Floats, available: int) -> Ints:
    """Ages of the innovations (window, n_sensors) furthest from what is usual, and of those before them, ascending.

    A sudden fault's onset must be met, for most of what it leaves may lie in its first cycles; the grid of
    :func:`onset_ages` passes over it once it is a few dozen cycles old.
    """
    rows = ring[(newest - np.arange(available)) % len(ring)]
    far = np.where(np.isfinite(rows), (rows / sd) ** 2, 0.0).max(axis=1)
    chosen = np.argsort(-far, kind="stable")[:SHARPEST]
    return np.unique(np.minimum(np.concatenate((chosen + 1, chosen + 2)), available)).astype(np.int64)


def judge(suspects: tuple[Hypothesis, ...], found: Likelihoods) -> Verdict:
    """Turn evidence into probabilities per name, "nothing" among them, and the group within ten to one of the first.

    All evidence is scaled down so that the largest is FINEST at most: see there.
    """
    top = max(0.0, float(np.max(found.evidence)))
    temper = min(1.0, FINEST / top) if top > 0.0 else 1.0
    weights: dict[str, float] = {"nothing": exponential(-top * temper)}
    best: dict[str, int] = {"nothing": -1}
    instrument = 0.0
    for h, suspect in enumerate(suspects):
        share = 1.0 if suspect.source == "gain" else 0.5  # one shape for a gain, two for the others
        weight = share * exponential((float(found.evidence[h]) - top) * temper)
        weights[suspect.name] = weights.get(suspect.name, 0.0) + weight
        if suspect.source != "disturbance":
            instrument += weight
        known = best.get(suspect.name)
        if known is None or found.evidence[h] > found.evidence[known]:
            best[suspect.name] = h
    total = sum(weights.values())
    names = sorted(weights, key=lambda name: -weights[name])
    first = weights[names[0]]
    alone = first >= NAMING_RATIO * (total - first)
    group = (
        tuple(names[:1]) if alone else tuple(name for name in names if weights[name] * NAMING_RATIO > first)
    )
    return Verdict(
        tuple(names),
        tuple(weights[name] / total for name in names),
        best[names[0]],
        instrument / total,
        group,
    )
