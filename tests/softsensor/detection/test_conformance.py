"""The conformance probability against the same sums done at once with numpy and scipy, and against what is true."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import logsumexp
from scipy.stats import norm

from softsensor.detection.conformance import (
    BLOCK,
    Evidence,
    Seen,
    Standing,
    follow_conformance,
    weigh_onsets,
)
from softsensor.detection.state_of_tests import ONSETS

SENSORS, BLOCKS = 2, 40
Array = NDArray[np.float64]


def known(seed: int = 1) -> Standing:
    """Two sensors with a step and a ramp each, and a disturbance's step; random signatures."""
    random = np.random.default_rng(seed)
    table = np.ascontiguousarray(np.cumsum(random.normal(size=(BLOCKS, SENSORS, 5)), axis=0) * 0.05 + 0.3)
    rate = np.log(0.5 * np.array([1e-6, 1e-6, 1e-6, 1e-6, 1e-5]))
    return Standing(
        table, np.array([[1.0, 0.0], [-0.3, 1.1]]), np.ones(SENSORS, dtype=np.int64),
        np.array([0, 1, 0, 1, 0]), np.array([0, 0, 1, 1, -1]), np.array([3.0, 3.0, 2.0, 2.0, 1.0]),
        rate, 1e4, np.array([1.0, 0.7]),
    )  # fmt: skip


def nothing_seen() -> Evidence:
    return Evidence(
        np.zeros(SENSORS + 1),
        np.full(ONSETS, -1, dtype=np.int64),
        np.zeros((ONSETS, 5)),
        np.zeros((ONSETS, 5)),
        np.full(SENSORS, np.nan),
    )


def seen(innovations: Array, k: int) -> Seen:
    """A cycle whose innovations have an sd of 0.5, of which 0.3 is the sensor's noise; a ring that keeps everything."""
    return Seen(innovations[k], np.full(SENSORS, 0.5), np.full(SENSORS, 0.3), innovations)


def run(what: Standing, innovations: Array, valid_from: int = 0) -> Evidence:
    evidence = nothing_seen()
    for k in range(len(innovations)):
        follow_conformance(what, evidence, seen(innovations, k), k, valid_from, False)
    return evidence


def at_once(what: Standing, innovations: Array, onsets: list[int]) -> tuple[Array, list[tuple[Array, Array]]]:
    """beyond (n_sensors,) and N, D per onset, from the whole record."""
    white = innovations @ what.whitening.T
    whole = np.isfinite(white).all(axis=1)
    white[~whole] = 0.0
    now, sums = len(innovations), []
    for onset in onsets:
        N, D = np.zeros(5), np.zeros(5)
        for block in range(onset // BLOCK, now // BLOCK):
            rows = slice(block * BLOCK, (block + 1) * BLOCK)
            v = what.table[block - onset // BLOCK]
            N += v.T @ white[rows].sum(axis=0)
            D += whole[rows].sum() * (v * v).sum(axis=0)
        sums.append((N, D))
    logs, shares = [0.0], [np.zeros(SENSORS)]
    edges = [*onsets, now]
    for c, onset in enumerate(onsets):
        span = max(0.5 * (edges[c + 1] - (edges[c - 1] if c else onset)), 1.0) + (
            what.before if c == 0 else 0.0
        )
        for h in range(5):
            N, D = sums[c][0][h], sums[c][1][h]
            age = float(now - onset) if what.ramp[h] else 1.0
            p = what.prior_sd[h] / age
            marginal = norm(0.0, np.sqrt(D + p * p * D * D)).logpdf(N) - norm(0.0, np.sqrt(D)).logpdf(N)
            logs.append(marginal + what.log_rate[h] + np.log(span))
            share = np.zeros(SENSORS)
            if what.sensor[h] >= 0:
                size = norm(N / (D + p**-2) * age, (D + p**-2) ** -0.5 * age)
                limit = what.tolerance[what.sensor[h]]
                share[what.sensor[h]] = size.sf(limit) + size.cdf(-limit)
            shares.append(share)
    weights = np.exp(np.array(logs) - logsumexp(logs))
    return weights @ np.array(shares), sums


@pytest.mark.parametrize("bias", [0.0, 0.25, 0.6])
def test_the_recursion_is_the_sum_over_the_whole_record(bias: float) -> None:
    """COMPUTED with scipy's densities; error functions of the program are good to 1.5e-7. A fifth of a sensor missing."""
    random, what = np.random.default_rng(7), known()
    innovations = random.normal(size=(16 * BLOCK, SENSORS))
    innovations[5 * BLOCK :, 0] += bias
    innovations[random.random(len(innovations)) < 0.2, 1] = np.nan
    evidence = run(what, innovations)
    onsets = [int(value) for value in evidence.onset if value >= 0]
    assert onsets == list(range(0, 16 * BLOCK, BLOCK))
    wanted, sums = at_once(what, innovations.copy(), onsets)
    for c, (N, D) in enumerate(sums):
        assert np.allclose(evidence.N[c], N, rtol=1e-12, atol=1e-12)
        assert np.allclose(evidence.D[c], D, rtol=1e-12)
    weigh_onsets(what, evidence, len(innovations))
    assert np.allclose(evidence.beyond, wanted, rtol=1e-5, atol=1e-6)


def test_onsets_reach_back_to_the_first_and_thin_out_with_age() -> None:
    evidence = run(known(), np.zeros((300 * BLOCK, SENSORS)))
    now = 300 * BLOCK
    ages = now - evidence.onset
    assert evidence.onset[0] == 0
    assert np.all(np.diff(evidence.onset) > 0)
    assert ages[-1] == BLOCK
    assert np.all(ages[1:-1] / ages[2:] < 2.1)


def test_nothing_counts_before_the_filter_has_settled_or_while_the_tests_rest() -> None:
    what, random = known(), np.random.default_rng(3)
    innovations = random.normal(size=(20 * BLOCK, SENSORS))
    innovations[: 10 * BLOCK] = 50.0
    late = run(what, innovations, valid_from=10 * BLOCK)
    assert int(late.onset[0]) == 10 * BLOCK
    assert np.all(late.beyond < 0.05)
    follow_conformance(what, late, seen(innovations, 0), 20 * BLOCK, 0, True)
    assert np.all(late.onset == -1)
    assert np.isnan(late.beyond).all()


@pytest.mark.parametrize("bias", [0.0, 0.5, 1.2])
def test_a_sensor_left_out_is_judged_by_its_mean_difference_from_the_prediction_without_it(
    bias: float,
) -> None:
    """COMPUTED: normal with the mean of the last 64 differences that are there, variance 0.25 - 0.09 + 0.09 / 64 or less."""
    what = known()._replace(use=np.array([1, 0], dtype=np.int64))
    innovations = np.random.default_rng(5).normal(size=(16 * BLOCK, SENSORS)) * 0.3 + bias
    innovations[-20:-10, 1] = np.nan
    evidence = run(what, innovations)
    lately = innovations[-64:, 1][np.isfinite(innovations[-64:, 1])]
    belief = norm(lately.mean(), np.sqrt(0.25 - 0.09 + 0.09 / len(lately)))
    assert np.isclose(evidence.beyond[1], belief.sf(0.7) + belief.cdf(-0.7), atol=1e-6)
