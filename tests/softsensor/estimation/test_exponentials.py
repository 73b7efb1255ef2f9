"""The compiled matrix exponential against scipy's, from slow to very stiff cascades."""

from __future__ import annotations

from decimal import Decimal, localcontext

import numpy as np
import pytest
from scipy.linalg import expm

from softsensor.estimation.exponentials import exponentiate, multiply


def cascade(lags: list[float]) -> np.ndarray:
    """[0 0; B A] of lags in series."""
    M = np.zeros((len(lags) + 1, len(lags) + 1))
    for i, lag in enumerate(lags):
        M[i + 1, i], M[i + 1, i + 1] = 1.0 / lag, -1.0 / lag
    return M


@pytest.mark.parametrize(
    "lags",
    [
        [1.0],
        [1e-3],
        [1e6],
        [3.0, 3.0, 3.0],
        [100.0, 0.01],
        [0.01, 100.0],
        [0.5] * 6,
        [1e4, 1.0, 1e-2],
    ],
)
@pytest.mark.parametrize("t", [1.0, 0.37, 10.0])
def test_a_cascade_of_lags(lags: list[float], t: float) -> None:
    M = cascade(lags)
    E, work = np.zeros_like(M), np.zeros_like(M)
    exponentiate(M, len(M), t, E, work)
    np.testing.assert_allclose(E, expm(M * t), rtol=1e-11, atol=1e-14)
    np.testing.assert_allclose(E.sum(axis=1), 1.0, rtol=1e-12)  # a constant input of one keeps states of one


def test_lags_that_are_nearly_equal() -> None:
    """scipy 1.17 divides a difference of exponentials there and is off by 2e-8; decimals with 50 digits are not."""
    first, second, t = Decimal(2), Decimal(2.0 + 1e-9), Decimal(10)
    with localcontext(prec=50):
        expected = ((-t / second).exp() - (-t / first).exp()) / (1 / first - 1 / second) / second
    M = cascade([2.0, 2.0 + 1e-9])
    E, work = np.zeros_like(M), np.zeros_like(M)
    exponentiate(M, 3, 10.0, E, work)
    assert E[2, 1] == pytest.approx(float(expected), rel=1e-13)


def test_random_lower_triangular_matrices_and_a_part_of_a_larger_one() -> None:
    rng = np.random.default_rng(3)
    for n in range(1, 8):
        M = np.tril(rng.normal(0.0, 1.0, (8, 8)))
        E, work = np.zeros_like(M), np.zeros_like(M)
        exponentiate(M, n, 0.8, E, work)
        expected = expm(M[:n, :n] * 0.8)
        np.testing.assert_allclose(E[:n, :n], expected, rtol=0.0, atol=1e-13 * np.abs(expected).max())


def test_an_integrators_diagonal_is_exactly_one() -> None:
    M = cascade([5.0, 2.0])
    M[2, 2] = 0.0
    E, work = np.zeros_like(M), np.zeros_like(M)
    exponentiate(M, 3, 10.0, E, work)
    assert E[0, 0] == E[2, 2] == 1.0
    assert E[0, 1:].tolist() == [0.0, 0.0]


def test_products_of_lower_triangular_matrices() -> None:
    rng = np.random.default_rng(4)
    left, right = np.tril(rng.normal(size=(5, 5))), np.tril(rng.normal(size=(5, 5)))
    out = np.full((5, 5), np.nan)
    multiply(left, right, 5, out)
    np.testing.assert_allclose(out, left @ right, atol=1e-15)
