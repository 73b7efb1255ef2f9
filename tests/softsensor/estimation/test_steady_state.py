"""The settled filter against scipy's and python-control's Riccati solvers, closed forms and the plain
recursion.
"""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import solve_discrete_are

from plant_models.plant_model import StochasticPart
from softsensor.estimation.steady_state import Rows, SteadyState, Stretch, settle

Matrix = NDArray[np.float64]


def part(
    A: list[list[float]] | Matrix, q: list[float], C: list[list[float]] | Matrix, P0: Matrix | None = None
) -> StochasticPart:
    size = len(q)
    return StochasticPart(
        A=np.array(A, dtype=np.float64),
        q=np.array(q, dtype=np.float64),
        C=np.array(C, dtype=np.float64),
        P0=np.zeros((size, size)) if P0 is None else P0,
        state_names=tuple(f"state {i}" for i in range(size)),
        disturbance_index=(0,),
    )


def settled(system: StochasticPart, r: list[float], count: int | None = None) -> SteadyState:
    measured = len(r) if count is None else count
    return settle(system, Rows(system.C[:measured], np.array(r, dtype=np.float64)))


def random_system(seed: int) -> tuple[StochasticPart, list[float]]:
    rng = np.random.default_rng(seed)
    n, m = int(rng.integers(2, 9)), int(rng.integers(1, 4))
    A = rng.normal(size=(n, n))
    A *= rng.uniform(0.5, 0.999) / np.abs(np.linalg.eigvals(A)).max()
    return part(A, list(rng.uniform(0.01, 2.0, n)), rng.normal(size=(m, n))), list(rng.uniform(0.05, 2.0, m))


@pytest.mark.parametrize("seed", range(12))
def test_random_systems_agree_with_scipy_and_control(seed: int) -> None:
    system, r = random_system(seed)
    found = settled(system, r)
    P = solve_discrete_are(system.A.T, system.C.T, np.diag(system.q), np.diag(r))
    np.testing.assert_allclose(found.P_prior, P, rtol=1e-9, atol=1e-11)
    L, P_control, poles = control.dlqe(
        system.A, np.eye(len(system.q)), system.C, np.diag(system.q), np.diag(r)
    )
    np.testing.assert_allclose(found.L, L, rtol=1e-8, atol=1e-10)
    np.testing.assert_allclose(found.P_prior, P_control, rtol=1e-8, atol=1e-10)
    assert found.spectral_radius == pytest.approx(np.abs(poles).max(), rel=1e-8)
    assert found.stabilising
    assert found.residual < 1e-12
    assert found.unbounded.shape[1] == 0


def test_a_stretch_is_its_cycles_one_by_one() -> None:
    system, r = random_system(3)
    rows = Rows(system.C, np.array(r))
    stretch = Stretch(system.A, rows.C.T @ (rows.C / rows.r[:, None]), np.diag(system.q))
    P = np.diag(np.arange(1.0, len(system.q) + 1.0))
    stepped = P
    for cycle in range(1, 17):
        S = rows.C @ stepped @ rows.C.T + np.diag(rows.r)
        K = stepped @ rows.C.T @ np.linalg.inv(S)
        stepped = system.A @ (stepped - K @ S @ K.T) @ system.A.T + np.diag(system.q)
        if cycle in (1, 2, 4, 8, 16):
            np.testing.assert_allclose(stretch.after(P), stepped, rtol=1e-10, atol=1e-13)
            stretch = stretch.doubled()


def test_no_rows_leave_the_stationary_covariance() -> None:
    system = part([[0.9, 0.0], [0.3, 0.7]], [0.19, 0.0], [[0.0, 1.0]])
    found = settle(system, Rows(np.zeros((0, 2)), np.zeros(0)))
    np.testing.assert_allclose(found.P_prior, control.dlyap(system.A, np.diag(system.q)), rtol=1e-12)
    assert found.K.shape == (2, 0)
    assert found.variance(np.array([1.0, 0.0])) == pytest.approx(1.0)


def test_an_unseen_walk_is_unbounded_and_harms_nothing_else() -> None:
    # state 0 is seen, state 1 walks unseen; the estimate's row reaches both, the sensor's only state 0
    system = part([[0.9, 0.0], [0.0, 1.0]], [0.1, 0.01], [[1.0, 0.0], [1.0, 1.0]])
    found = settled(system, [1.0])
    assert found.unbounded.shape[1] == 1
    assert math.isinf(found.variance(system.C[1]))
    alone = settled(part([[0.9]], [0.1], [[1.0]]), [1.0])
    assert found.variance(system.C[0]) == pytest.approx(alone.variance(np.array([1.0])), rel=1e-12)
    assert found.stabilising


def test_two_walks_seen_only_together() -> None:
    # y = a + b: the sum settles, the difference does not; a row along the sum keeps a finite variance
    system = part([[1.0, 0.0], [0.0, 1.0]], [0.03, 0.01], [[1.0, 1.0], [1.0, 0.0], [2.0, 2.0]])
    found = settled(system, [1.0])
    alone = settled(part([[1.0]], [0.04], [[1.0]]), [1.0])
    assert found.variance(system.C[0]) == pytest.approx(alone.variance(np.array([1.0])), rel=1e-10)
    assert found.variance(system.C[2]) == pytest.approx(4.0 * alone.variance(np.array([1.0])), rel=1e-10)
    assert math.isinf(found.variance(system.C[1]))


def test_an_integrator_of_a_stable_disturbance() -> None:
    # d first order, level integrates d; seen by a level sensor it settles, unseen it does not
    system = part([[0.95, 0.0], [0.5, 1.0]], [0.05, 0.0], [[0.0, 1.0], [1.0, 0.0]])
    found = settled(system, [0.04])
    P = solve_discrete_are(system.A.T, system.C[:1].T, np.diag(system.q), np.array([[0.04]]))
    np.testing.assert_allclose(found.P_prior, P, rtol=1e-9)
    blind = settle(system, Rows(system.C[1:], np.array([0.1])))
    assert math.isinf(blind.variance(system.C[0]))
    assert math.isfinite(blind.variance(system.C[1]))


def test_a_double_integrator_seen_at_its_end() -> None:
    system = part([[1.0, 0.0], [1.0, 1.0]], [0.2, 0.0], [[0.0, 1.0]])
    P = solve_discrete_are(system.A.T, system.C.T, np.diag(system.q), np.eye(1))
    np.testing.assert_allclose(settled(system, [1.0]).P_prior, P, rtol=1e-9)


def test_a_constant_offset_keeps_what_no_reading_takes_away() -> None:
    # a sensor sees a walk and its own constant offset: after the first readings inseparable, so the offset
    # keeps
    # a part of its variance; the plain recursion over many cycles is the second computation
    P0 = np.diag([0.3, 0.25])
    walk = part([[1.0, 0.0], [0.0, 1.0]], [0.1, 0.0], [[1.0, 1.0], [0.0, 1.0]], P0)
    P, c = P0, walk.C[:1]
    for _ in range(3000):
        S = c @ P @ c.T + 1.0
        after = P - P @ c.T @ c @ P / S
        P = after + np.diag(walk.q)
    kept = settled(walk, [1.0]).variance(np.array([0.0, 1.0]))
    assert 0.05 < kept < 0.25
    assert kept == pytest.approx(after[1, 1], rel=1e-6)
    # with a first-order disturbance the offset is learnt in the end; unseen it stays as it was
    first = settled(part([[0.9, 0.0], [0.0, 1.0]], [0.1, 0.0], [[1.0, 1.0], [0.0, 1.0]], P0), [1.0])
    assert first.variance(np.array([0.0, 1.0])) == pytest.approx(0.0, abs=1e-7)
    unseen = settled(part([[0.9, 0.0], [0.0, 1.0]], [0.1, 0.0], [[1.0, 0.0], [0.0, 1.0]], P0), [1.0])
    assert unseen.variance(np.array([0.0, 1.0])) == pytest.approx(0.25, rel=1e-6)


def test_a_slow_walk_settles_to_the_closed_form() -> None:
    q, r = 1e-12, 1.0
    exact = 0.5 * (q + math.sqrt(q * q + 4.0 * q * r))
    assert settled(part([[1.0]], [q], [[1.0]]), [r]).P_prior[0, 0] == pytest.approx(exact, rel=1e-8)
