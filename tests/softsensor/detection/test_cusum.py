"""One step of the sums: clip, cap, missing values, and the same bits as plain Python."""

from __future__ import annotations

import math

import numpy as np
import pytest

from plant_models.errors import Problem
from softsensor.detection.cusum import cusum, cusum_step


def test_both_sides() -> None:
    assert cusum_step(1.0, 2.0, 0.75, 0.5, 4.0, 10.0) == (1.25, 0.75)
    assert cusum_step(0.25, 0.25, 0.0, 0.5, 4.0, 10.0) == (0.0, 0.0)


def test_a_spike_counts_only_up_to_the_clip() -> None:
    assert cusum_step(0.0, 0.0, 1e9, 0.5, 4.0, 10.0) == (3.5, 0.0)
    assert cusum_step(0.0, 0.0, -math.inf, 0.5, 4.0, 10.0) == (0.0, 3.5)


def test_a_missing_innovation_leaves_the_sums() -> None:
    assert cusum_step(1.5, 0.25, math.nan, 0.5, 4.0, 10.0) == (1.5, 0.25)


def test_the_cap_bounds_the_sums_so_that_they_come_down_again() -> None:
    high, low = 0.0, 0.0
    for _ in range(100_000):
        high, low = cusum_step(high, low, 3.0, 0.5, 4.0, 10.0)
    assert (high, low) == (10.0, 0.0)
    steps = 0
    while high > 5.0:
        high, low = cusum_step(high, low, 0.0, 0.5, 4.0, 10.0)
        steps += 1
    assert steps == 10


def test_no_negative_zero_and_no_clip_or_cap() -> None:
    high, low = cusum_step(0.5, 0.0, 0.0, 0.5, math.inf, math.inf)
    assert (math.copysign(1.0, high), math.copysign(1.0, low)) == (1.0, 1.0)
    assert cusum_step(0.0, 0.0, 1e6, 0.5, math.inf, math.inf)[0] == 1e6 - 0.5


def test_compiled_and_interpreted_agree_to_the_last_bit() -> None:
    rng = np.random.default_rng(7)
    values = rng.normal(0.3, 2.0, 3000)
    values[rng.random(3000) < 0.05] = math.nan
    compiled = plain = (0.0, 0.0)
    for z in values:
        compiled = cusum_step(*compiled, float(z), 0.37, 3.0, 9.0)
        plain = cusum_step.py_func(*plain, float(z), 0.37, 3.0, 9.0)
        assert compiled == plain


def test_a_series_with_gaps() -> None:
    trace = cusum([0.0, 5.0, math.nan, 5.0], target=0.0, reference=0.5, interval=6.0, clip=4.0)
    assert trace.high.tolist() == [0.0, 3.5, 3.5, 7.0]
    assert (trace.first_high, trace.first_low) == (3, None)


@pytest.mark.parametrize(
    "settings",
    [
        {"target": math.nan, "reference": 0.5, "interval": 4.0},
        {"target": 0.0, "reference": -0.5, "interval": 4.0},
        {"target": 0.0, "reference": 0.5, "interval": 0.0},
        {"target": 0.0, "reference": 0.5, "interval": 4.0, "clip": 0.5},
    ],
)
def test_settings_that_mean_nothing(settings: dict[str, float]) -> None:
    with pytest.raises(Problem, match="cumulative sum"):
        cusum([1.0], **settings)


def test_a_table_is_no_series() -> None:
    with pytest.raises(Problem, match="series"):
        cusum(np.zeros((2, 2)), target=0.0, reference=0.5, interval=4.0)
