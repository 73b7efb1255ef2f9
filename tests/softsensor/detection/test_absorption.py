"""The innovation that a biased sensor leaves, against closed forms and a filter run with a biased sensor."""

from __future__ import annotations

import numpy as np
import pytest

from plant_models.plant_model import StochasticPart
from softsensor.detection.absorption import fading, is_absorbed, settled_innovation
from softsensor.detection.run_length import average_run_length, decision_interval
from softsensor.estimation.steady_state import Rows, SteadyState, settle


def settled(
    A: list[list[float]], q: list[float], C: list[list[float]], r: list[float]
) -> tuple[SteadyState, np.ndarray]:
    part = StochasticPart(
        np.array(A), np.array(q), np.array(C), np.zeros((len(q), len(q))), ("x",) * len(q), (0,)
    )
    return settle(part, Rows(part.C, np.array(r))), part.A


@pytest.mark.parametrize(
    ("a", "q", "printed"), [(1.0, 0.1, 0.0), (0.95, 0.1, 0.179259), (0.9, 0.1, 0.340376), (0.8, 0.36, 0.4)]
)
def test_scalar_closed_form(a: float, q: float, printed: float) -> None:
    # COMPUTED: unit step bias through the scalar steady filter, r = 1, settles at (1 - a) / (1 - a (1 - K))
    state, A = settled([[a]], [q], [[1.0]], [1.0])
    remaining = settled_innovation(state, A)[0, 0]
    assert remaining == pytest.approx(printed, abs=0.51e-6)
    assert remaining == pytest.approx((1.0 - a) / (1.0 - a * (1.0 - state.K[0, 0])), abs=1e-12)


def test_the_way_there_is_the_published_one() -> None:
    # COMPUTED: a = 1, q = .1: 1 .72984 .53267 .38877 .28374; a = .8, q = .36: 1 .7 .55 .475 .4375
    for a, q, printed in ((1.0, 0.1, "1 .72984 .53267 .38877 .28374"), (0.8, 0.36, "1 .7 .55 .475 .4375")):
        state, _ = settled([[a]], [q], [[1.0]], [1.0])
        error = 0.0
        for value in printed.split():
            innovation = 1.0 - error
            assert innovation == pytest.approx(float(value), abs=0.51e-5)
            error = a * (error + state.K[0, 0] * innovation)


def test_half_of_the_loss_is_gone_when_the_printed_values_say_so() -> None:
    # from the same series: halfway between 1 and .4 is .7, reached after one cycle; between 1 and 0 is .5,
    # after three
    for a, q, cycles in ((0.8, 0.36, 1), (1.0, 0.1, 3)):
        state, A = settled([[a]], [q], [[1.0]], [1.0])
        assert fading(state, A) == [cycles]


def test_a_run_with_a_biased_sensor_settles_where_computed() -> None:
    rng = np.random.default_rng(5)
    A = rng.normal(size=(4, 4))
    A *= 0.97 / np.abs(np.linalg.eigvals(A)).max()
    C = rng.normal(size=(3, 4))
    state, _ = settled(A.tolist(), [0.2, 0.1, 0.3, 0.1], C.tolist(), [0.5, 1.0, 0.7])
    x, bias = np.zeros(4), np.array([0.0, 0.4, -0.1])
    for _ in range(20_000):
        innovation = bias - C @ x
        x = A @ x + state.L @ innovation
    np.testing.assert_allclose(settled_innovation(state, A) @ bias, innovation, atol=1e-10)


def test_an_unseen_walk_beside_it_changes_nothing() -> None:
    alone, A = settled([[0.9]], [0.1], [[1.0]], [1.0])
    part = StochasticPart(
        np.diag([0.9, 1.0]),
        np.array([0.1, 0.5]),
        np.array([[1.0, 0.0]]),
        np.zeros((2, 2)),
        ("x", "w"),
        (0, 1),
    )
    beside = settle(part, Rows(part.C, np.array([1.0])))
    np.testing.assert_allclose(settled_innovation(beside, part.A), settled_innovation(alone, A), atol=1e-13)


def test_two_sensors_on_one_walk_share_the_bias() -> None:
    # both see the walk alone: the walk goes to the weighted mean, so the difference of the innovations
    # keeps the bias
    state, A = settled([[1.0]], [0.01], [[1.0], [1.0]], [1.0, 1.0])
    np.testing.assert_allclose(settled_innovation(state, A), [[0.5, -0.5], [-0.5, 0.5]], atol=1e-10)


def test_what_counts_as_absorbed() -> None:
    """By the test as it ships for gross steps: reference value 0.5, one false flag per 30 d of 10-s cycles."""
    promised = 259_200.0
    interval = decision_interval(0.5, promised, clip=4.0)
    absorbed = [
        is_absorbed(average_run_length(0.5, interval, shift, clip=4.0), promised)
        for shift in (0.0, 0.02, 0.05, 0.1, 0.3, 1.0, 3.0)
    ]
    assert absorbed == [True, True, True, True, False, False, False]
