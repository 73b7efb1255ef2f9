"""The time to a flag, against the exact run length and against plain simulation of the sums."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from independent.sum_banks import SumBank, first_found

from softsensor.detection.first_passage import LARGEST_MEAN, OneSum, passage, stretched
from softsensor.detection.run_length import average_run_length, decision_interval


@pytest.mark.parametrize("reference", [0.125, 0.25, 0.5, 0.8, 1.0, 1.5])
@pytest.mark.parametrize("run_length", [1440.0, 259_200.0])
def test_without_a_fault_flags_come_at_the_exact_rate(reference: float, run_length: float) -> None:
    interval = decision_interval(reference, run_length, clip=4.0)
    rate = passage(OneSum(reference, interval, 4.0)).false_rate()
    one_sided = average_run_length(reference, interval, two_sided=False, clip=4.0)
    assert rate * one_sided == pytest.approx(1.0, abs=0.015 if run_length > 1e5 else 0.03)


def test_a_constant_shift_is_found_as_the_run_length_equation_says() -> None:
    # from zero sums the mean time is the sum of the chances not to be found yet; at rest the sums are a
    # little ahead of zero, so the exact steady-state delay of spc's xcusum.ad applies: k .5, h 5, shift 1:
    # 9.650 (COMPUTED, spc 0.6.7, one-sided, no clip)
    course = stretched(np.ones(400), tuple(range(1, 401)))
    left = np.exp(passage(OneSum(0.5, 5.0, 30.0)).log_survival(course, 1.0, 400))
    assert 1.0 + left.sum() == pytest.approx(9.650, rel=0.003)


@pytest.mark.parametrize(
    ("reference", "interval"), [(0.25, 8.0), (0.5, 11.3), (1.5, 3.7)], ids=["slow", "middle", "fast"]
)
def test_a_fading_shift_is_found_as_often_as_in_a_simulation(reference: float, interval: float) -> None:
    """A large shift that the filter takes up within an hour: first clipped, then fading, then hardly there."""
    means = 0.08 + 6.0 * np.exp(-np.arange(600) / 12.0)
    for size in (0.3, 0.6, 1.0):
        found = first_found(
            SumBank((reference,), (interval,), 4.0, 4000), size * means, np.random.default_rng(11)
        )
        course = stretched(means, (5, 20, 60, 600))
        left = np.exp(passage(OneSum(reference, interval, 4.0)).log_survival(course, size, 600))
        for mark in (5, 20, 60, 600):
            seen = float(np.mean((found > 0) & (found <= mark)))
            # one-sided against both sides: a false flag on the other side is part of what is seen
            error = 4.0 * np.sqrt(max(seen * (1.0 - seen), 1e-3) / found.size) + 0.01
            assert 1.0 - left[course.ends == mark][0] == pytest.approx(seen, abs=error)


def test_stretches_keep_the_sum_and_end_at_every_mark() -> None:
    values = np.random.default_rng(2).normal(size=5000)
    course = stretched(values, (60, 480, 5000))
    lengths = np.diff(np.concatenate(([0], course.ends)))
    assert {60, 480, 5000} <= set(course.ends.tolist())
    assert np.sum(lengths * course.means) == pytest.approx(values.sum())
    assert lengths[:12].tolist() == [1] * 12
    assert course.ends.size < 150


def test_a_larger_fault_is_never_found_less_often() -> None:
    course = stretched(np.exp(-np.arange(1000) / 100.0), (1000,))
    one = passage(OneSum(0.5, 9.5, 4.0))
    left = [one.log_survival(course, size, 1000)[-1] for size in (0.0, 0.2, 0.5, 1.0, 2.0, 5.0, 50.0)]
    assert all(later < earlier for earlier, later in pairwise(left[:-1]))


def test_hopeless_and_certain_cases_keep_their_numbers_finite_or_say_never() -> None:
    one = passage(OneSum(1.5, 3.7, 4.0))
    course = stretched(np.ones(3000), (3000,))
    certain = one.log_survival(course, LARGEST_MEAN, 3000)
    assert certain.size == course.ends.size
    assert np.all(certain[5:] < -100.0)
    assert np.isneginf(certain[-1])
    assert one.log_survival(course, -5.0, 3000)[-1] == pytest.approx(0.0, abs=1e-12)
