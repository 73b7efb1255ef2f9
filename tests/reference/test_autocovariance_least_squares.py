"""Autocovariance least squares on the example of Odelson, Rajamani & Rawlings, Automatica 42 (2006) 303-308.

Constants of the example: from memory, the same as in a public script that was read (MEMORY). Means and standard
deviations over 200 runs: COMPUTED beforehand by an independent program; the published tables could not be read.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import solve_discrete_are

from softsensor.estimation.noise_tuning.autocovariance import (
    NoisySystem,
    autocovariance_least_squares,
    autocovariances,
    innovations_of_gain,
)

A = np.array([[0.1, 0.0, 0.1], [0.0, 0.2, 0.0], [0.0, 0.0, 0.3]])
G = np.array([[1.0], [2.0], [3.0]])
C = np.array([[0.1, 0.2, 0.0]])
EXAMPLE = NoisySystem(A, G, C)
Q, R = 0.5, 0.1
RUNS, LAGS = 200, 15


def predictor_gain(q: float, r: float) -> np.ndarray:
    P = solve_discrete_are(A.T, C.T, q * G @ G.T, np.array([[r]]))
    return np.ascontiguousarray(A @ P @ C.T / (C @ P @ C.T + r))


def estimates(points: int) -> np.ndarray:
    """Q and R of 200 runs (200, 2), from a filter tuned to Q = 0.2, R = 0.4."""
    rng = np.random.default_rng([2006, points])
    x, y = np.zeros((RUNS, 3)), np.zeros((RUNS, points, 1))
    for k in range(points):
        y[:, k] = x @ C.T + np.sqrt(R) * rng.standard_normal((RUNS, 1))
        x = x @ A.T + np.sqrt(Q) * rng.standard_normal((RUNS, 1)) @ G.T
    L = predictor_gain(0.2, 0.4)
    found = [autocovariance_least_squares(EXAMPLE, L, innovations_of_gain(A, C, L, run), LAGS) for run in y]
    return np.array([[item.process[0], item.measurement[0]] for item in found])


@pytest.mark.parametrize(
    ("points", "mean", "sd"),
    [(1000, (0.4924, 0.1014), (0.1315, 0.0332)), (10_000, (0.4979, 0.1004), (0.0408, 0.0100))],
)
def test_the_example_is_reproduced_within_its_monte_carlo_error(
    points: int, mean: tuple[float, float], sd: tuple[float, float]
) -> None:
    found = estimates(points)
    error_of_mean = np.array(sd) * np.sqrt(2.0 / RUNS)
    error_of_sd = np.array(sd) / np.sqrt(RUNS)

    assert np.all(np.abs(found.mean(axis=0) - mean) < 3.0 * error_of_mean)
    assert np.all(np.abs(found.std(axis=0) - sd) < 3.0 * error_of_sd)


def test_two_noises_that_leave_the_same_autocovariances_are_told_by_the_condition() -> None:
    twice = NoisySystem(A, np.hstack((G, 2.0 * G)), C)
    e = np.random.default_rng(1).standard_normal((500, 1))

    assert autocovariance_least_squares(twice, predictor_gain(0.2, 0.4), e, LAGS).condition > 1e12


def test_a_gain_that_does_not_stabilise_is_refused() -> None:
    walk = NoisySystem(np.eye(1), np.eye(1), np.eye(1))

    with pytest.raises(ValueError, match="does not settle"):
        autocovariance_least_squares(walk, np.zeros((1, 1)), np.zeros((100, 1)))


def test_autocovariances_with_gaps_are_means_over_the_pairs_present() -> None:
    e = np.array([[1.0], [np.nan], [2.0], [4.0]])

    assert autocovariances(e, 3)[:, 0, 0].tolist() == [7.0, 8.0, 2.0]
