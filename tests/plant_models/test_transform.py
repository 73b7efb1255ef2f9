"""Transforms against math and numpy, and their two directions against each other."""

from __future__ import annotations

import doctest
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from plant_models import elementary_arrays, model_scale, transform
from plant_models.elementary_arrays import exponential, logarithm
from plant_models.model_scale import bias_in_unit, in_model_scale, scale_at_operating_point, to_model
from plant_models.specification import EstimateSpec, LabSpec, SensorSpec, UnitSpec
from plant_models.transform import Transform

LOG, SQRT = Transform("log"), Transform("sqrt")
RISING = Transform("table", ((0.0, 0.0), (50.0, 20.0), (100.0, 100.0)))
FALLING = Transform("table", ((-10.0, 5.0), (0.0, 3.0), (20.0, -1.0)))


@pytest.mark.parametrize("module", [elementary_arrays, transform, model_scale])
def test_examples_in_the_text_are_true(module: object) -> None:
    assert doctest.testmod(module).failed == 0  # type: ignore[arg-type]


def test_logarithm_and_exponential_are_those_of_the_mathematics_library() -> None:
    rng = np.random.default_rng(1)
    x = np.exp(rng.uniform(-700.0, 700.0, 20_000))
    expected = np.array([math.log(value) for value in x])
    np.testing.assert_allclose(logarithm(x), expected, rtol=1e-14, atol=1e-16)
    z = rng.uniform(-700.0, 709.0, 20_000)
    np.testing.assert_allclose(exponential(z), [math.exp(value) for value in z], rtol=1e-14)
    assert np.isnan(logarithm(np.array([0.0, -1.0, np.inf, np.nan]))).all()
    far = exponential(np.array([-np.inf, -701.0, 710.0, np.inf, np.nan]))
    np.testing.assert_array_equal(far, [0, 0, np.inf, np.inf, np.nan])


def test_arrays_of_any_shape_give_the_bits_of_their_elements() -> None:
    """A live cycle has one row, a replay thousands: numpy's loops must not differ between them."""
    rng = np.random.default_rng(2)
    raw = rng.uniform(0.01, 99.0, (4099, 3))
    for kind in (LOG, SQRT, RISING):
        whole = kind.forward(raw)
        assert np.array_equal(whole, np.array([[kind.forward(np.array([x]))[0] for x in row] for row in raw]))
        assert np.array_equal(kind.back(whole)[7::5], kind.back(whole[7::5]))


@settings(max_examples=200, deadline=None)
@given(st.sampled_from([LOG, SQRT, RISING, FALLING]), st.floats(0.001, 19.9))
def test_back_is_the_inverse_and_the_slopes_are_those_of_differences(kind: Transform, raw: float) -> None:
    model = kind.forward(np.array([raw]))
    assert math.isclose(kind.back(model)[0], raw, rel_tol=1e-13, abs_tol=1e-13)
    assert math.isclose(kind.slopes(np.array([raw]))[0], 1.0 / kind.back_slope(model)[0], rel_tol=1e-9)
    h = 1e-6 * raw
    near = kind.forward(np.array([raw + h, raw - h]))
    if all(abs(raw - x) > 2.0 * h for x, _ in kind.points):
        assert math.isclose(kind.slope(raw), (near[0] - near[1]) / (2.0 * h), rel_tol=1e-6)
        assert math.isclose(kind.back_slope(model)[0], 1.0 / kind.slope(raw), rel_tol=1e-9)


def test_outside_its_domain_a_transform_has_no_value() -> None:
    for kind, out in ((LOG, [0.0, -1.0]), (SQRT, [-1e-9]), (RISING, [-0.1, 100.1]), (FALLING, [-10.1, 20.1])):
        values = np.array([*out, np.nan])
        assert np.isnan(kind.forward(values)).all()
        assert not kind.holds(values).any()
    assert SQRT.forward(np.array([0.0]))[0] == 0.0
    assert RISING.forward(np.array([0.0, 50.0, 100.0])).tolist() == [0.0, 20.0, 100.0]
    assert FALLING.forward(np.array([-10.0, 0.0, 20.0])).tolist() == [5.0, 3.0, -1.0]


def test_beyond_its_values_the_inverse_goes_on_monotonely() -> None:
    assert SQRT.back(np.array([-3.0, 3.0])).tolist() == [-9.0, 9.0]
    assert RISING.back(np.array([-4.0, 116.0])).tolist() == [-10.0, 110.0]
    assert FALLING.back(np.array([6.0, -2.0])).tolist() == [-15.0, 25.0]


def test_at_a_point_of_a_table_the_slope_is_the_mean_of_both_sides() -> None:
    assert RISING.slope(50.0) == 0.5 * (0.4 + 1.6)
    assert (RISING.slope(0.0), RISING.slope(100.0)) == (0.4, 1.6)


def test_limits_are_carried_over_as_far_as_the_domain_goes() -> None:
    assert LOG.limits(0.0, np.inf) == (-np.inf, np.inf)
    assert SQRT.limits(-5.0, 16.0) == (0.0, 4.0)
    assert RISING.limits(-np.inf, 50.0) == (0.0, 20.0)
    assert FALLING.limits(-np.inf, 0.0) == (3.0, 5.0)


def unit_of(sensor: SensorSpec, estimate: EstimateSpec) -> UnitSpec:
    return UnitSpec("U", "U", 1.0, (), (sensor,), (estimate,), (), (), 1.0)


def test_numbers_of_an_instrument_are_converted_at_the_operating_point() -> None:
    sensor = SensorSpec("AI1", "ppm", 40.0, (0.0, 100.0), 2.0, 8.0, (20.0, 60.0), 0.4, 0.8, transform=LOG)
    estimate = EstimateSpec("AY1", "ppm", 0.0, (-8.0, 16.0), lab=LabSpec("AL1", 3.0), transform=FALLING)
    spec = unit_of(sensor, estimate)
    scaled = in_model_scale(spec)
    one = scaled.sensors[0]
    assert math.isclose(one.operating_point, math.log(40.0), rel_tol=1e-15)
    found = (one.noise_sd, one.tolerance, one.bias_walk_sd, one.bias_initial_sd)
    np.testing.assert_allclose(found, (0.05, 0.2, 0.01, 0.02), rtol=1e-15)
    np.testing.assert_allclose(one.range, (math.log(40.0) - 1.0, math.log(40.0) + 1.5), rtol=1e-15)
    assert one.validated_range is not None
    np.testing.assert_allclose(one.validated_range, (math.log(40.0) - 0.5, math.log(40.0) + 0.5), rtol=1e-15)
    other = scaled.estimates[0]
    assert other.lab is not None
    assert (other.operating_point, other.lab.sd, other.range) == (
        3.0,
        3.0 * 0.2,
        (3.0 - 16.0 * 0.2, 3.0 + 8.0 * 0.2),
    )
    assert one.transform is None
    assert other.transform is None
    assert in_model_scale(scaled) is scaled


def test_a_bias_is_told_in_the_unit_of_the_instrument_at_its_operating_point() -> None:
    sensor = SensorSpec("AI1", "ppm", 40.0, (0.0, 100.0), 2.0, 8.0, transform=LOG)
    size, sd = bias_in_unit(sensor, 0.1, 0.01)
    assert math.isclose(size, 40.0 * math.expm1(0.1), rel_tol=1e-12)
    assert math.isclose(sd, 0.01 * 40.0 * math.exp(0.1), rel_tol=1e-12)
    assert scale_at_operating_point(sensor) == 1.0 / 40.0
    plain = SensorSpec("TI1", "degC", 40.0, (0.0, 100.0), 2.0, 8.0)
    assert bias_in_unit(plain, 0.1, 0.01) == (0.1, 0.01)


def test_without_transforms_arrays_and_specifications_are_the_same_objects() -> None:
    sensor = SensorSpec("TI1", "degC", 40.0, (0.0, 100.0), 2.0, 8.0)
    estimate = EstimateSpec("AY1", "ppm", 1.0, (0.0, 16.0))
    spec, values = unit_of(sensor, estimate), np.zeros((3, 1))
    assert in_model_scale(spec) is spec
    assert to_model(spec.sensors, values) is values
