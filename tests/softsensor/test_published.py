"""What is published of an estimate, against scipy's distributions."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from scipy.integrate import quad
from scipy.special import erfcx

from plant_models.specification import EstimateSpec
from plant_models.transform import Transform
from softsensor.published import limits_in_model_scale, published, published_one, truncated_quantile

POINTS = {"lower": 0.025, "value": 0.5, "upper": 0.975}


def estimate(transform: Transform | None = None, limits: tuple[float, float] | None = None) -> EstimateSpec:
    return EstimateSpec("AY1", "ppm", 5.0, (0.0, 10.0), transform=transform, limits=limits)


def test_without_transform_and_limits_it_is_mean_and_1_96_sd() -> None:
    mean, sd = np.array([1.0, np.nan, -3.0]), np.array([0.5, np.nan, 2.0])
    found = published(estimate(), mean, sd)
    assert found.value is mean
    assert found.sd is sd
    np.testing.assert_array_equal(found.lower, mean - 1.959963984540054 * sd)
    np.testing.assert_array_equal(found.upper, mean + 1.959963984540054 * sd)


@settings(max_examples=200, deadline=None)
@given(st.floats(-20.0, 20.0), st.floats(1e-3, 3.0))
def test_of_a_log_they_are_the_points_of_a_lognormal_distribution(mean: float, sd: float) -> None:
    found = published(estimate(Transform("log")), np.array([mean]), np.array([sd]))
    truth = stats.lognorm(s=sd, scale=np.exp(mean))
    for name, p in POINTS.items():
        np.testing.assert_allclose(getattr(found, name), truth.ppf(p), rtol=1e-12)
    np.testing.assert_allclose(found.sd, sd * np.exp(mean), rtol=1e-13)


@settings(max_examples=300, deadline=None)
@given(st.floats(-5.0, 5.0), st.floats(0.05, 3.0), st.floats(-4.0, 4.0), st.floats(0.1, 8.0))
def test_with_limits_they_are_the_points_of_a_truncated_normal_distribution(
    mean: float, sd: float, low: float, width: float
) -> None:
    high = low + width
    a, b = (low - mean) / sd, (high - mean) / sd
    found = published(estimate(limits=(low, high)), np.array([mean]), np.array([sd]))
    for name, p in POINTS.items():
        expected = stats.truncnorm.ppf(p, a, b, loc=mean, scale=sd)
        np.testing.assert_allclose(getattr(found, name), expected, rtol=1e-8, atol=1e-8 * sd)
    assert low <= found.lower[0] <= found.value[0] <= found.upper[0] <= high
    assert found.sd[0] == sd


@pytest.mark.parametrize("ends", [(0.0, np.inf), (-np.inf, 0.0), (0.0, 1e9)])
@pytest.mark.parametrize("away", [0.0, 3.0, 9.0, 30.0, 300.0])
def test_far_beyond_a_limit_the_points_keep_their_digits(ends: tuple[float, float], away: float) -> None:
    """The state lies ``away`` sd outside; tails by the scaled complementary error function, which does not underflow."""
    side = 1.0 if ends[0] == 0.0 else -1.0
    for p in (0.025, 0.5, 0.975):
        found = float(truncated_quantile(p, np.array([-side * away]), np.ones(1), ends)[0]) * side
        x, further = away / np.sqrt(2.0), (away + found) / np.sqrt(2.0)
        beyond = erfcx(further) / erfcx(x) * np.exp(-found * (away + 0.5 * found))
        assert abs(beyond - (1.0 - p if side > 0.0 else p)) < 1e-9 * max(10.0, away)


def test_limits_of_an_estimate_with_a_transform_are_truncated_in_its_scale() -> None:
    """Density of the raw value by the change of variables, integrated."""
    item, mean, sd = estimate(Transform("log"), (2.0, 9.0)), 2.0, 0.6
    value, _, lower, upper = published_one(item, mean, sd)
    mass = quad(lambda x: stats.norm.pdf((np.log(x) - mean) / sd) / x, 2.0, 9.0)[0]
    for found, p in ((lower, 0.025), (value, 0.5), (upper, 0.975)):
        below = quad(lambda x: stats.norm.pdf((np.log(x) - mean) / sd) / x, 2.0, found)[0]
        assert abs(below / mass - p) < 1e-10


def test_a_falling_table_changes_the_ends_round() -> None:
    item = estimate(Transform("table", ((0.0, 3.0), (10.0, -2.0))))
    value, sd, lower, upper = published_one(item, 0.5, 0.1)
    np.testing.assert_allclose(
        (value, sd, lower, upper), (5.0, 0.2, 5.0 - 0.3919927969, 5.0 + 0.3919927969), rtol=1e-9
    )
    item = estimate(item.transform, (5.5, 10.0))
    assert limits_in_model_scale(item) == (-2.0, 0.25)
    value, _, lower, upper = published_one(item, 0.5, 0.1)
    assert 5.5 <= lower < value < upper <= 10.0


def test_far_from_its_limits_an_estimate_is_shown_as_without() -> None:
    mean, sd = np.array([5.0]), np.array([0.3])
    inside, plain = published(estimate(limits=(0.0, 10.0)), mean, sd), published(estimate(), mean, sd)
    for found, expected in zip(inside, plain, strict=True):
        np.testing.assert_allclose(found, expected, rtol=1e-13)


def test_no_value_stays_none_and_no_spread_is_the_value_itself() -> None:
    item = estimate(limits=(0.0, 10.0))
    assert all(np.isnan(published(item, np.array([np.nan]), np.array([np.nan]))).tolist())
    assert published_one(item, 4.0, 0.0) == (4.0, 0.0, 4.0, 4.0)
    assert published_one(item, -4.0, 0.0) == (0.0, 0.0, 0.0, 0.0)
