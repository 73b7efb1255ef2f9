"""The settled filter against published closed forms and values. COMPUTED: with scipy 1.17.1 and
python-control 0.10.2.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from plant_models.plant_model import StochasticPart
from softsensor.estimation.steady_state import Rows, SteadyState, settle


def settled(A: list[list[float]], q: list[float], C: list[list[float]], r: list[float]) -> SteadyState:
    part = StochasticPart(
        A=np.array(A),
        q=np.array(q),
        C=np.array(C),
        P0=np.zeros((len(q), len(q))),
        state_names=tuple(f"state {i}" for i in range(len(q))),
        disturbance_index=(0,),
    )
    return settle(part, Rows(part.C, np.array(r)))


@pytest.mark.parametrize(
    ("a", "q", "r", "prior", "gain"),
    [  # COMPUTED (scipy's Riccati solver agrees)
        (1.0, 1.0, 1.0, 1.6180340, 0.6180340),
        (1.0, 1.0, 4.0, 2.5615528, 0.3903882),
        (0.9, 1.0, 1.0, 1.4838999, 0.5974073),
        (0.95, 0.1, 1.0, 0.3174802, 0.2409753),
        (0.8, 0.36, 1.0, 0.6, 0.375),
        (1.1, 1.0, 1.0, 1.7737707, 0.6394799),
    ],
)
def test_scalar(a: float, q: float, r: float, prior: float, gain: float) -> None:
    found = settled([[a]], [q], [[1.0]], [r])
    b = q + (a * a - 1.0) * r
    closed = 0.5 * (b + math.sqrt(b * b + 4.0 * q * r))
    assert found.P_prior[0, 0] == pytest.approx(prior, abs=0.51e-7)
    assert found.K[0, 0] == pytest.approx(gain, abs=0.51e-7)
    assert found.P_prior[0, 0] == pytest.approx(closed, rel=1e-13)
    assert found.P_posterior[0, 0] == pytest.approx((1.0 - closed / (closed + r)) * closed, rel=1e-12)
    assert found.L[0, 0] == pytest.approx(a * closed / (closed + r), rel=1e-13)


@pytest.mark.parametrize(
    ("index", "alpha", "beta"),
    [(0.1, 0.36, 0.08), (0.5, 0.628373, 0.304806), (1.0, 0.75, 0.5), (2.0, 0.854102, 0.763932)],
)
def test_alpha_beta_filter(index: float, alpha: float, beta: float) -> None:
    # Kalata (1984), closed form MEMORY, COMPUTED equal to scipy's Riccati solver. Position and velocity
    # with a
    # piecewise-constant acceleration of sd `index`, T = 1, R = 1: noise (1/2, 1) a. In states (position -
    # velocity / 2,
    # velocity) that noise enters the second alone, which gives the diagonal Q that this solver takes:
    # s = p - v/2: s+ = p + v + a/2 - (v + a)/2 = s + v; v+ = v + a; y = s + v/2.
    found = settled([[1.0, 1.0], [0.0, 1.0]], [0.0, index**2], [[1.0, 0.5]], [1.0])
    velocity = found.K[1, 0]
    position = found.K[0, 0] + 0.5 * velocity
    assert position == pytest.approx(alpha, abs=0.51e-6)
    assert velocity == pytest.approx(beta, abs=0.51e-6)
    root = 0.25 * (4.0 + index - math.sqrt(8.0 * index + index**2))
    assert position == pytest.approx(1.0 - root**2, rel=1e-10)
    assert velocity == pytest.approx(2.0 * (1.0 + root**2) - 4.0 * root, rel=1e-10)


def test_two_states_with_a_walk() -> None:
    # COMPUTED (scipy and python-control dlqe)
    found = settled([[0.9, 0.0], [0.0, 1.0]], [0.01, 0.04], [[1.0, 1.0]], [0.25])
    np.testing.assert_allclose(found.K[:, 0], [0.03365781, 0.32126643], atol=0.51e-8)
    np.testing.assert_allclose(found.L[:, 0], [0.03029202, 0.32126643], atol=0.51e-8)
    np.testing.assert_allclose(
        found.P_prior, [[0.0507599, -0.03771577], [-0.03771577, 0.16222302]], atol=0.51e-7
    )
    assert found.S[0, 0] == pytest.approx(0.38755138, abs=0.51e-8)


def test_nile_local_level() -> None:
    # Durbin & Koopman (2012) section 2.2: variances READ in two public files citing it; steady values
    # COMPUTED
    # (statsmodels), steady F = 20600.26 READ in another package's documentation
    found = settled([[1.0]], [1469.1], [[1.0]], [15099.0])
    assert found.P_prior[0, 0] == pytest.approx(5501.25794, abs=0.51e-5)
    assert found.S[0, 0] == pytest.approx(20600.25794, abs=0.51e-5)
    assert found.K[0, 0] == pytest.approx(0.26704801, abs=0.51e-8)
    assert found.P_posterior[0, 0] == pytest.approx(4032.15794, abs=0.51e-5)
