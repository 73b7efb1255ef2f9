"""Fits recover transfer functions from their step responses, and say honestly how well."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal

from plant_models.identification.step_response import Structure, response_to_moves, step_response
from plant_models.identification.step_test import StepTestError, fit_step_response

TIME = np.arange(0.0, 12000.0, 10.0)
MOVES = np.where(TIME < 600.0, 0.0, np.where(TIME < 6600.0, 1.0, -1.0))


@pytest.mark.parametrize(
    ("numerator", "factors"),
    [
        ([1.0], ([300.0, 1.0],)),
        ([-120.0, 1.0], ([90_000.0, 700.0, 1.0],)),
        ([500.0, 1.0], ([250_000.0, 700.0, 1.0], [80.0, 1.0])),
        ([1.0], ([90_000.0, 600.0, 1.0],)),
        ([20_000.0, 90.0, 1.0], ([90_000.0, 600.0, 1.0], [300.0, 1.0])),
    ],
)
def test_step_response_agrees_with_scipy(numerator: list[float], factors: tuple[list[float], ...]) -> None:
    denominator = np.array([1.0])
    for factor in factors:
        denominator = np.polymul(denominator, factor)
    _, expected = signal.step((numerator, denominator), T=TIME)
    ours = step_response(TIME, np.array(numerator), tuple(np.array(f) for f in factors), 0.0)
    assert np.abs(ours - expected).max() < 2e-6


def test_uneven_times_give_the_same_response() -> None:
    factors = (np.array([90_000.0, 500.0, 1.0]),)
    moves = [(600.0, 1.0), (6600.0, -2.0)]
    even = response_to_moves(TIME, moves, np.array([1.0]), factors, 37.0)
    chosen = np.sort(np.random.default_rng(1).choice(len(TIME), 200, replace=False))
    uneven = response_to_moves(TIME[chosen], moves, np.array([1.0]), factors, 37.0)
    assert np.allclose(uneven, even[chosen], rtol=0.0, atol=1e-9)


def test_first_order_with_dead_time_is_recovered_within_its_intervals() -> None:
    """A Monte Carlo of the intervals: about 95 % of 40 hold the truth, fewer than 31 once in 100,000 times."""
    truth = {"gain": -1.8, "dead_time": 47.0, "a1": 420.0}
    clean = truth["gain"] * response_to_moves(
        TIME, [(600.0, 1.0), (6600.0, -2.0)], np.array([1.0]), (np.array([420.0, 1.0]),), 47.0
    )
    random = np.random.default_rng(20)
    hits = dict.fromkeys(truth, 0)
    for _ in range(40):
        noisy = 5.0 + clean + 0.1 * random.standard_normal(len(TIME))
        fit = fit_step_response(TIME, MOVES, noisy, [Structure(1)], scales=(600.0,))
        assert fit.rms_misfit == pytest.approx(0.1, rel=0.1)
        for name, value in truth.items():
            lower, upper = fit.confidence_interval(name)
            assert upper - lower < 0.6 * abs(value)
            hits[name] += lower <= value <= upper
    assert min(hits.values()) >= 31


def test_inverse_response_is_found_and_chosen() -> None:
    clean = 2.0 * response_to_moves(
        TIME,
        [(600.0, 1.0), (6600.0, -2.0)],
        np.array([-200.0, 1.0]),
        (np.array([400.0 * 150.0, 550.0, 1.0]),),
        20.0,
    )
    fit = fit_step_response(TIME, MOVES, clean + 0.01 * np.random.default_rng(2).standard_normal(len(TIME)))
    assert fit.structure == Structure(2, 1)
    assert fit.lead_times is not None
    assert fit.lead_times[0] == pytest.approx(-200.0, rel=0.05)
    assert fit.time_constants == pytest.approx((400.0, 150.0), rel=0.1)


def test_simpler_structure_wins_where_it_suffices() -> None:
    clean = response_to_moves(
        TIME, [(600.0, 1.0), (6600.0, -2.0)], np.array([1.0]), (np.array([500.0, 1.0]),), 30.0
    )
    fit = fit_step_response(TIME, MOVES, clean + 0.05 * np.random.default_rng(3).standard_normal(len(TIME)))
    assert fit.structure == Structure(1)


def test_complex_poles_have_no_time_constants() -> None:
    clean = response_to_moves(
        TIME, [(600.0, 1.0), (6600.0, -2.0)], np.array([1.0]), (np.array([90_000.0, 300.0, 1.0]),), 0.0
    )
    fit = fit_step_response(TIME, MOVES, clean, [Structure(2)], scales=(300.0,))
    assert fit.time_constants is None
    assert np.allclose(fit.denominator, [90_000.0, 300.0, 1.0], rtol=1e-3)


@pytest.mark.parametrize(
    ("time", "u", "y", "message"),
    [
        (TIME, MOVES[:-1], TIME, "one length"),
        (TIME[:10], MOVES[:10], TIME[:10], "too few"),
        (TIME, MOVES, np.where(TIME > 500.0, np.nan, 1.0), "finite"),
        (TIME[::-1], MOVES, TIME, "rise"),
        (TIME, np.zeros_like(TIME), TIME, "never moved"),
    ],
)
def test_unusable_tests_are_refused(time: np.ndarray, u: np.ndarray, y: np.ndarray, message: str) -> None:
    with pytest.raises(StepTestError, match=message):
        fit_step_response(time, u, y)


def test_structures_that_cannot_be_are_refused() -> None:
    with pytest.raises(ValueError, match="order"):
        Structure(1, 1)
