"""Correlations and the cumulative periodogram against second computations and published bounds."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.signal import periodogram
from scipy.stats import kstest
from statsmodels.tsa.stattools import acf, acovf

from softsensor.estimation.noise_tuning.whiteness import correlations, cumulative_periodogram, white_bound

LAGS = 30


def noise(seed: int, count: int = 901, pole: float = 0.0) -> np.ndarray:
    z = np.random.default_rng(seed).standard_normal(count)
    for k in range(1, count):
        z[k] += pole * z[k - 1]
    return z


@pytest.mark.parametrize("pole", [0.0, 0.6, -0.4])
def test_correlations_are_those_of_another_program(pole: float) -> None:
    z = noise(1, pole=pole)

    found = correlations(z - z.mean(), LAGS)

    assert found.value == pytest.approx(acf(z, nlags=LAGS, adjusted=True)[1:], abs=1e-12)
    assert found.bound == pytest.approx(1.96 / np.sqrt(len(z) - np.arange(1, LAGS + 1)), rel=1e-4)


def test_a_mean_that_is_not_zero_shows_as_correlation() -> None:
    z = noise(2) + 0.5
    expected = acovf(z, adjusted=True, demean=False, nlag=LAGS)

    assert correlations(z, LAGS).value == pytest.approx(expected[1:] / expected[0], abs=1e-12)
    assert np.all(correlations(z, LAGS).value > 0.1)


def test_gaps_are_left_out_pair_by_pair() -> None:
    z = noise(3, pole=0.5)
    z[np.random.default_rng(4).random(len(z)) < 0.2] = np.nan
    found = correlations(z, 3)

    for lag in (1, 2, 3):
        pairs = [(a, b) for a, b in zip(z, z[lag:], strict=False) if not (math.isnan(a) or math.isnan(b))]
        mean = sum(a * b for a, b in pairs) / len(pairs)
        assert found.value[lag - 1] == pytest.approx(mean / np.nanmean(z**2), rel=1e-12)
        assert found.bound[lag - 1] == pytest.approx(1.96 / math.sqrt(len(pairs)), rel=1e-4)


@pytest.mark.parametrize("count", [400, 901])
def test_the_cumulative_periodogram_is_that_of_another_program(count: int) -> None:
    z = noise(5, count, 0.3)
    frequency, power = periodogram(z, detrend="constant")
    ordinates = (count - 1) // 2
    share = np.cumsum(power[1 : ordinates + 1])

    found = cumulative_periodogram(z)

    assert found.frequency == pytest.approx(frequency[1 : ordinates + 1])
    assert found.share == pytest.approx(share / share[-1], rel=1e-9)
    uniform = kstest(found.share[:-1], "uniform")
    assert found.distance == pytest.approx(uniform.statistic, rel=1e-9)
    assert (found.distance > found.bound) == (uniform.pvalue < 0.05)


@pytest.mark.parametrize(("uniform", "bound"), [(5, 0.563), (10, 0.409), (20, 0.294), (30, 0.242)])
def test_bounds_are_those_of_published_tables(uniform: int, bound: float) -> None:
    """MEMORY: two-sided 5 % points of Kolmogorov's statistic, Miller, J. Am. Stat. Assoc. 51 (1956) 111-121."""
    assert white_bound(uniform + 1) == pytest.approx(bound, abs=6e-4)


def test_bounds_of_long_stretches_are_those_of_durbin() -> None:
    """MEMORY: 1.36 / sqrt(m - 1) at 5 %, Durbin 1969 by way of Box & Jenkins, Time Series Analysis, section 8.2.5."""
    assert white_bound(4001) * math.sqrt(4000.0) == pytest.approx(1.36, abs=0.01)


def test_white_noise_leaves_the_bounds_once_in_twenty_and_coloured_noise_always() -> None:
    gaps = np.random.default_rng(6).random(901) < 0.1
    periodograms = [cumulative_periodogram(np.where(gaps, np.nan, noise(100 + k))) for k in range(400)]
    out = np.mean([item.distance > item.bound for item in periodograms])
    lags = [correlations(noise(100 + k), LAGS) for k in range(100)]
    beyond = np.mean([np.abs(item.value) > item.bound for item in lags])

    assert abs(out - 0.05) < 3.0 * math.sqrt(0.05 * 0.95 / 400)
    assert abs(beyond - 0.05) < 0.015
    for pole, side in ((0.4, 1.0), (-0.4, -1.0)):
        found = cumulative_periodogram(noise(7, pole=pole))
        assert found.distance > found.bound
        assert side * float(np.mean(found.share - 2.0 * found.frequency)) > 0.0


def test_too_few_readings_give_nothing() -> None:
    for z in (np.full(600, np.nan), np.zeros(600), np.ones(3)):
        assert len(cumulative_periodogram(z).share) == 0
        assert math.isnan(cumulative_periodogram(z).bound)
        assert np.all(np.isnan(correlations(z, LAGS).value))
