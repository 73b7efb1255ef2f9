"""The diagnosis's sums against batch least squares and Gaussian densities, hypothesis by hypothesis and onset by onset.

Source: Willsky & Jones, IEEE Trans. AC-21 (1976) 108-112; the average over onsets and the prior on the size are those of
softsensor.detection.diagnosis. Everything here is COMPUTED with numpy and scipy from the raw innovations.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import logsumexp

from softsensor.detection.diagnosis import Likelihoods, judge, likelihoods, onset_ages, sharp_ages
from softsensor.detection.signatures import Hypothesis, inverse_cholesky

SENSORS, WINDOW, HYPOTHESES = 3, 32, 3
TOLERANCE = 1e-9
Array = NDArray[np.float64]


class Case:
    """Random innovations with covariance S in a ring that has wrapped, and raw signatures of unit size."""

    def __init__(self, seed: int, missing: bool = False, left_out: bool = False) -> None:
        random = np.random.default_rng(seed)
        root = random.standard_normal((SENSORS, SENSORS)) + 2.0 * np.eye(SENSORS)
        self.S = root @ root.T
        self.use = np.ones(SENSORS, dtype=np.int64)
        if left_out:
            self.use[1] = 0
        self.raw = np.cumsum(random.standard_normal((HYPOTHESES, WINDOW, SENSORS)), axis=1) * 0.3
        self.innovations = random.standard_normal((WINDOW, SENSORS)) @ root.T + 0.4
        if missing:
            self.innovations[random.random((WINDOW, SENSORS)) < 0.05] = np.nan
        self.whitening = inverse_cholesky(self.S, self.use)
        self.table = np.ascontiguousarray(self.raw @ self.whitening.T)
        self.prior = random.uniform(0.2, 3.0, HYPOTHESES)
        self.newest = 1000
        self.ring = np.empty((WINDOW, SENSORS))
        for k in range(WINDOW):
            self.ring[(self.newest - (WINDOW - 1 - k)) % WINDOW] = self.innovations[k]

    def found(self, ages: list[int], scored: int = WINDOW, older: bool = False) -> Likelihoods:
        return likelihoods(
            self.table,
            self.prior,
            self.ring,
            self.newest,
            self.whitening,
            self.use,
            np.array(ages, dtype=np.int64),
            scored,
            np.full(HYPOTHESES, int(older), dtype=np.int64),
        )

    def stacked(self, h: int, age: int) -> tuple[Array, Array, Array]:
        """The last ``age`` cycles that are whole: signature and innovations one below the other, their covariance."""
        rows = [
            k for k in range(WINDOW - age, WINDOW) if not np.isnan(self.innovations[k][self.use == 1]).any()
        ]
        kept = np.flatnonzero(self.use)
        g = np.concatenate([self.raw[h, k - (WINDOW - age)][kept] for k in rows])
        e = np.concatenate([self.innovations[k][kept] for k in rows])
        S: Array = np.asarray(np.kron(np.eye(len(rows)), self.S[np.ix_(kept, kept)]), dtype=np.float64)
        return g, e, S


def log_density(e: Array, S: Array) -> float:
    """Of a zero-mean Gaussian, but for its constant."""
    return float(-0.5 * np.linalg.slogdet(S)[1] - 0.5 * e @ np.linalg.solve(S, e))


@pytest.mark.parametrize(
    ("missing", "left_out"), [(False, False), (True, False), (False, True), (True, True)]
)
def test_every_hypothesis_and_onset_against_batch_least_squares(missing: bool, left_out: bool) -> None:
    case = Case(11 + 2 * missing + left_out, missing, left_out)
    for age in range(2, WINDOW + 1, 3):
        found = case.found([age])
        for h in range(HYPOTHESES):
            g, e, S = case.stacked(h, age)
            weighted = np.linalg.solve(S, g)
            precision = case.prior[h] ** -2
            size = (weighted @ e) / (weighted @ g + precision)
            assert np.isclose(found.size[h], size, rtol=TOLERANCE)
            assert np.isclose(found.size_sd[h], (weighted @ g + precision) ** -0.5, rtol=TOLERANCE)
            assert found.age[h] == age
            ratio = log_density(e, S + case.prior[h] ** 2 * np.outer(g, g)) - log_density(e, S)
            assert np.isclose(found.evidence[h], ratio, rtol=TOLERANCE, atol=TOLERANCE)


def test_an_onset_before_what_counts_is_scored_over_what_counts() -> None:
    case = Case(23)
    g, e, S = (part[15 * SENSORS :] for part in case.stacked(0, 25))
    weighted = np.linalg.solve(S[:, 15 * SENSORS :], g)
    precision = case.prior[0] ** -2
    found = case.found([25], scored=10)
    assert np.isclose(found.size[0], (weighted @ e) / (weighted @ g + precision), rtol=TOLERANCE)
    assert found.age[0] == 25


def test_onsets_are_averaged_and_the_best_one_reported() -> None:
    case = Case(5)
    ages = [1, 2, 5, 9, 30]
    together = case.found(ages)
    single = [case.found([age]) for age in ages]
    for h in range(HYPOTHESES):
        scores = [item.evidence[h] for item in single]
        # each shorter onset is scored over its own cycles: the ones before it cancel in the ratio
        assert np.isclose(together.evidence[h], logsumexp(scores) - np.log(len(ages)), rtol=TOLERANCE)
        assert together.age[h] == ages[int(np.argmax(scores))]
        assert together.size[h] == single[int(np.argmax(scores))].size[h]


@pytest.mark.parametrize("missing", [False, True])
def test_a_fault_from_before_everything_is_what_is_left_in_the_end(missing: bool) -> None:
    """One onset more, a signature that stands at its last row: against batch least squares like the others."""
    case = Case(31, missing)
    whole = [k for k in range(WINDOW) if not np.isnan(case.innovations[k]).any()]
    e = np.concatenate([case.innovations[k] for k in whole])
    S = np.kron(np.eye(len(whole)), case.S)
    alone, with_older = case.found([WINDOW]), case.found([WINDOW], older=True)
    for h in range(HYPOTHESES):
        g = np.tile(case.raw[h, -1], len(whole))
        ratio = log_density(e, S + case.prior[h] ** 2 * np.outer(g, g)) - log_density(e, S)
        expected = logsumexp([alone.evidence[h], ratio]) - np.log(2.0)
        assert np.isclose(with_older.evidence[h], expected, rtol=TOLERANCE)
        assert with_older.age[h] == WINDOW


def test_onsets_are_looked_for_where_innovations_are_far_from_usual() -> None:
    ring = np.zeros((64, 2))
    newest = 100
    ring[(newest - 20) % 64, 1] = -9.0
    ring[(newest - 33) % 64, 0] = 30.0
    ages = sharp_ages(ring, newest, np.array([4.0, 1.0]), 40)
    assert {21, 22, 34, 35} <= set(ages.tolist())
    assert len(ages) <= 8
    assert max(sharp_ages(ring, newest, np.array([4.0, 1.0]), 21).tolist()) == 21


def test_onsets_reach_back_to_the_first_cycle_and_grow_by_a_sixth() -> None:
    for available in (1, 2, 7, 100, 2048):
        ages = onset_ages(available)
        assert ages[0] == 1
        assert ages[-1] == available
        steps = np.diff(ages)
        assert np.all(steps >= 1)
        assert np.all(steps <= np.maximum(1, ages[:-1] // 6))


SUSPECTS = (
    Hypothesis("sensor", 0, "TI1", "step", 1.0),
    Hypothesis("sensor", 0, "TI1", "ramp", 1.0),
    Hypothesis("disturbance", 0, "feed", "step", 1.0),
    Hypothesis("input", 0, "FI1", "step", 1.0),
)


def verdict(*evidence: float) -> tuple[tuple[str, ...], tuple[float, ...], tuple[str, ...], float]:
    count = len(evidence)
    found = Likelihoods(np.array(evidence), np.ones(count, dtype=np.int64), np.zeros(count), np.ones(count))
    result = judge(SUSPECTS, found)
    return result.names, result.probabilities, result.group, result.instrument


def test_probabilities_add_shapes_of_one_name_and_count_nothing_as_one() -> None:
    evidence = np.array([2.0, 3.0, 2.5, 0.0])
    names, probabilities, group, instrument = verdict(*evidence)
    weights = {"nothing": 1.0, "TI1": 0.5 * (np.exp(2.0) + np.exp(3.0))}
    weights |= {"feed": 0.5 * np.exp(2.5), "FI1": 0.5}
    total = sum(weights.values())
    assert names == ("TI1", "feed", "nothing", "FI1")
    assert np.allclose(probabilities, [weights[name] / total for name in names], rtol=1e-12)
    assert np.isclose(instrument, (weights["TI1"] + weights["FI1"]) / total, rtol=1e-12)
    assert group == ("TI1", "feed")


def test_a_name_stands_alone_at_ten_to_one_against_all_others() -> None:
    """TI1's step against nothing (1), a disturbance and an input (0.5 each): 0.5 e^x = 10 * 2 divides."""
    for margin, alone in ((0.01, True), (-0.01, False)):
        evidence = [np.log(40.0) + margin, -1e3, 0.0, 0.0]
        names, probabilities, group, _ = verdict(*evidence)
        assert names[:2] == ("TI1", "nothing")
        assert (probabilities[0] >= 10.0 / 11.0) is alone
        # not alone: "nothing" is 20 to 1 by itself, so the group is still the one name; the rest are below 10 to 1 together
        assert group == ("TI1",)
    assert verdict(np.log(18.0), -1e3, 0.0, 0.0)[2] == ("TI1", "nothing")
