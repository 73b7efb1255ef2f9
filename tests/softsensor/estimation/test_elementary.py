"""Exponential and logarithm without the machine's library, against that library."""

from __future__ import annotations

import math

from hypothesis import example, given, settings
from hypothesis import strategies as st

from softsensor.estimation.elementary import error_function, exponential, logarithm

TOLERANCE = 1e-14


@settings(deadline=None)
@given(st.floats(-700.0, 700.0))
@example(0.0)
@example(-0.0)
@example(0.34657359027997264)
@example(-700.0)
def test_exponential(x: float) -> None:
    assert math.isclose(exponential(x), math.exp(x), rel_tol=TOLERANCE)


@settings(deadline=None)
@given(st.floats(max_value=-700.0, exclude_max=True, allow_infinity=True))
def test_exponential_far_below_is_zero(x: float) -> None:
    assert exponential(x) == 0.0


@settings(deadline=None)
@given(st.floats(5e-324, 1.7976931348623157e308))
@example(1.0)
@example(0.7071067811865476)
@example(0.7071067811865475)
@example(1.0 + 2**-52)
@example(1.0 - 2**-53)
def test_logarithm(x: float) -> None:
    assert math.isclose(logarithm(x), math.log(x), rel_tol=TOLERANCE)


@settings(deadline=None)
@given(st.floats(-600.0, 600.0))
def test_each_undoes_the_other(x: float) -> None:
    assert math.isclose(logarithm(exponential(x)), x, rel_tol=TOLERANCE, abs_tol=2e-15)


@settings(deadline=None)
@given(st.floats(0.0, 30.0))
def test_error_function(x: float) -> None:
    """The approximation's stated error, 1.5e-7, with a little room for rounding."""
    assert abs(error_function(x) - math.erf(x)) < 2e-7
