"""The conformal factor: what it promises it keeps, whatever the errors' distribution."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binomtest

from softsensor.estimation.noise_tuning.interval_scale import Scores, conformal_scale, share_interval


def scores(error: np.ndarray, own: float = 0.5) -> Scores:
    return Scores(error, np.ones(len(error)), np.full(len(error), own**2))


def heavy(rng: np.random.Generator, n: int) -> np.ndarray:
    """Errors of a model that is wrong: twice too large, with heavy tails and a bias."""
    return 2.0 * rng.standard_t(4, n) + 0.5


def test_the_next_result_is_covered_as_often_as_promised() -> None:
    rng, hits, runs = np.random.default_rng(1), 0, 2000
    for _ in range(runs):
        error = heavy(rng, 101)
        hits += scores(error[100:]).inside(conformal_scale(scores(error[:100])))
    low, high = share_interval(hits, runs)

    assert low <= 0.95 + 1.0 / 101.0
    assert high >= 0.95


def test_errors_as_the_model_says_need_a_factor_near_one() -> None:
    error = math.sqrt(1.25) * np.random.default_rng(2).standard_normal(20_000)

    assert conformal_scale(scores(error)) == pytest.approx(1.0, abs=0.03)


def test_one_wrong_result_in_fifty_does_not_set_the_factor() -> None:
    error = np.random.default_rng(3).standard_normal(50)
    wrong = error.copy()
    wrong[np.argmax(np.abs(error))] = 1e6

    assert conformal_scale(scores(wrong)) == conformal_scale(scores(error))


def test_few_results_give_no_factor_and_a_noisy_laboratory_gives_zero() -> None:
    error = np.random.default_rng(4).standard_normal(100)

    assert math.isnan(conformal_scale(scores(error[:39])))
    assert conformal_scale(scores(error, own=5.0)) == 0.0


@pytest.mark.parametrize(("hits", "count"), [(0, 12), (37, 40), (40, 40)])
def test_the_interval_of_a_share_is_the_exact_one(hits: int, count: int) -> None:
    exact = binomtest(hits, count).proportion_ci(0.95, "exact")

    assert share_interval(hits, count) == pytest.approx((exact.low, exact.high))
