"""The run-length solver against a Markov chain, limits, and settings that have no answer."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import norm

from softsensor.detection.run_length import (
    RunLengthError,
    average_run_length,
    decision_interval,
    steady_state_delay,
)


def chain_run_length(k: float, h: float, shift: float, clip: float, states: int) -> float:
    """Brook & Evans (1972): the sum on a grid, one-sided, with clipped values; second order in the grid."""
    width = 2.0 * h / (2 * states - 1)
    centres = width * np.arange(states)

    def below(x: np.ndarray) -> np.ndarray:
        """P(clipped value <= x)."""
        return np.where(x >= clip, 1.0, np.where(x < -clip, 0.0, norm.cdf(x - shift)))

    edges = centres[None, :] - centres[:, None] + k
    moves = below(edges + 0.5 * width) - below(edges - 0.5 * width)
    moves[:, 0] = below(edges[:, 0] + 0.5 * width)
    return float(np.linalg.solve(np.eye(states) - moves, np.ones(states))[0])


@pytest.mark.parametrize(
    ("k", "h", "shift", "clip"),
    [
        (0.5, 4.1, 0.0, 2.0),
        (0.5, 4.1, 1.0, 2.0),
        (0.25, 7.3, 0.0, 3.0),
        (1.0, 3.3, 0.7, 1.8),
        (0.1, 12.0, 0.2, 4.0),
    ],
)
def test_clipped_values_agree_with_a_markov_chain(k: float, h: float, shift: float, clip: float) -> None:
    exact = average_run_length(k, h, shift, two_sided=False, clip=clip)
    assert chain_run_length(k, h, shift, clip, 1601) == pytest.approx(exact, rel=2e-3)
    assert abs(average_run_length(k, h, shift, two_sided=False) - exact) > 0.0


def test_a_wide_clip_changes_nothing() -> None:
    for shift in (0.0, 0.5, 2.0):
        assert average_run_length(0.5, 6.0, shift, clip=9.0) == pytest.approx(
            average_run_length(0.5, 6.0, shift), rel=1e-9
        )
    assert average_run_length(0.5, 6.0, head_start=2.0, clip=9.0) == pytest.approx(
        average_run_length(0.5, 6.0, head_start=2.0), rel=1e-9
    )
    assert steady_state_delay(0.5, 5.0, 1.0, clip=9.0) == pytest.approx(
        steady_state_delay(0.5, 5.0, 1.0), rel=1e-9
    )


def test_the_run_length_jumps_where_one_clipped_value_stops_being_enough() -> None:
    # k = 1, clip = 2: a clipped value lifts a sum from zero to exactly 1. Below an interval of 1 it flags
    # alone, above it
    # does not. Bounds by hand: below, the first value above 2 flags, so L <= 1 / P(x > 2); above, at least
    # two values are
    # needed and two values above 2 in a row suffice, so L <= (1 + p) / p^2 with p = P(x > 2).
    p = float(norm.sf(2.0))
    below = average_run_length(1.0, 1.0 - 1e-9, two_sided=False, clip=2.0)
    above = average_run_length(1.0, 1.0 + 1e-9, two_sided=False, clip=2.0)
    assert below < 1.0 / p
    assert 1.2 * below < above < (1.0 + p) / p**2


def test_shortest_interval_is_a_single_value() -> None:
    # h -> 0: the first value above k flags; geometric with P(x > k).
    assert average_run_length(1.0, 1e-7, two_sided=False) == pytest.approx(1.0 / norm.sf(1.0), rel=1e-5)
    assert average_run_length(1.0, 1e-7, two_sided=False, clip=2.0) == pytest.approx(
        1.0 / norm.sf(1.0), rel=1e-5
    )


def test_astronomic_run_lengths_follow_the_exponential_law() -> None:
    # Siegmund (1985): log L grows by 2 k per unit of interval. The usual form of the equation is singular
    # here.
    for k, h in ((1.0, 30.0), (1.0, 60.0), (2.0, 20.0)):
        growth = math.log(
            average_run_length(k, h + 1.0, two_sided=False) / average_run_length(k, h, two_sided=False)
        )
        assert growth == pytest.approx(2.0 * k, rel=1e-7)
    with pytest.raises(RunLengthError, match="beyond double precision"):
        average_run_length(2.0, 400.0)
    with pytest.raises(RunLengthError, match="six digits"):
        average_run_length(1.0, 30.0, clip=4.0)


@pytest.mark.parametrize("reference", [0.01, 0.02, 0.1, 0.5, 1.0, 2.0])
@pytest.mark.parametrize("run_length", [50.0, 259_200.0, 2_592_000.0, 1e7])
@pytest.mark.parametrize("clip", [None, 4.0])
def test_interval_and_run_length_are_inverse(reference: float, run_length: float, clip: float | None) -> None:
    h = decision_interval(reference, run_length, clip=clip)
    assert average_run_length(reference, h, clip=clip) == pytest.approx(run_length, rel=1e-7)


def test_small_references_agree_with_siegmund() -> None:
    # The closed approximation is good where the reference is small (0.14 % at k = 0.25, h = 8).
    for k, h in ((0.02, 200.0), (0.05, 80.0)):
        b = h + 1.166
        siegmund = (math.exp(2 * k * b) - 2 * k * b - 1) / (2 * k**2)
        assert average_run_length(k, h, two_sided=False) == pytest.approx(siegmund, rel=2e-3)


def test_inside_a_jump_the_smallest_interval_that_keeps_the_promise() -> None:
    # k = 2, clip = 3: one clipped value moves a sum by 1; just below 1 it flags alone, just above it does
    # not.
    low = average_run_length(2.0, 1.0 - 1e-6, clip=3.0)
    high = average_run_length(2.0, 1.0 + 1e-6, clip=3.0)
    wanted = math.sqrt(low * high)
    h = decision_interval(2.0, wanted, clip=3.0)
    assert h == pytest.approx(1.0, abs=1e-6)
    assert average_run_length(2.0, h, clip=3.0) >= wanted


def test_the_side_that_a_large_shift_leaves_alone_does_no_harm() -> None:
    # with clipped values and a shift of 7 every value is at the clip: each lifts the sum by clip - k = 3
    assert average_run_length(1.0, 4.875, 7.0, clip=4.0) == pytest.approx(2.0, rel=1e-2)
    assert average_run_length(1.0, 4.875, -7.0, clip=4.0) == pytest.approx(2.0, rel=1e-2)
    assert average_run_length(1.0, 40.0, 30.0, clip=4.0) == pytest.approx(14.0, rel=1e-9)
    assert average_run_length(1.0, 40.0, 30.0, head_start=10.0, clip=4.0) == pytest.approx(11.0, rel=1e-9)
    assert average_run_length(0.5, 5.0, 30.0) == pytest.approx(1.0, rel=1e-9)


def test_run_length_falls_with_shift_and_rises_with_interval() -> None:
    for clip in (None, 4.0):
        by_shift = [average_run_length(0.3, 7.0, s, clip=clip) for s in (0.0, 0.1, 0.3, 0.6, 1.0, 2.0, 4.0)]
        assert by_shift == sorted(by_shift, reverse=True)
        by_interval = [average_run_length(0.3, h, clip=clip) for h in (0.5, 1.0, 3.0, 5.5, 9.0, 14.0)]
        assert by_interval == sorted(by_interval)
        assert average_run_length(0.3, 7.0, 0.5, clip=clip) == pytest.approx(
            average_run_length(0.3, 7.0, -0.5, clip=clip), rel=1e-12
        )


@pytest.mark.parametrize(
    ("arguments", "complaint"),
    [
        ({"reference": -0.1, "interval": 4.0}, "reference value"),
        ({"reference": math.nan, "interval": 4.0}, "reference value"),
        ({"reference": 0.5, "interval": 0.0}, "decision interval"),
        ({"reference": 0.5, "interval": math.inf}, "decision interval"),
        ({"reference": 0.5, "interval": 4.0, "shift": math.nan}, "shift"),
        ({"reference": 0.5, "interval": 4.0, "head_start": 4.0}, "head start"),
        ({"reference": 0.5, "interval": 4.0, "head_start": 3.0}, "half of the interval"),
        ({"reference": 0.5, "interval": 4.0, "clip": 0.5}, "no way up"),
    ],
)
def test_settings_that_mean_nothing(arguments: dict[str, float], complaint: str) -> None:
    with pytest.raises(RunLengthError, match=complaint):
        average_run_length(**arguments)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("reference", "run_length", "clip", "complaint"),
    [
        (0.5, math.nan, None, "positive number"),
        (0.5, -3.0, None, "positive number"),
        (0.5, 1.5, None, "shortest"),
        (0.5, 1e13, 4.0, "six digits"),
        (0.0, 1e9, None, "no decision interval"),
    ],
)
def test_promises_that_cannot_be_kept(
    reference: float, run_length: float, clip: float | None, complaint: str
) -> None:
    with pytest.raises(RunLengthError, match=complaint):
        decision_interval(reference, run_length, clip=clip)
