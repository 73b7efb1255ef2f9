"""The sum of hits and misses against simulated results, and its run lengths against a count by hand."""

from __future__ import annotations

import numpy as np
import pytest

from softsensor.detection.coverage import LIMIT, MISS, alarms, run_length


@pytest.mark.parametrize(("share", "expected"), [(0.05, 1284.0), (0.16, 42.0), (0.25, 20.0)])
def test_run_lengths_are_those_of_the_handbook_and_of_simulated_results(
    share: float, expected: float
) -> None:
    misses = np.random.default_rng(8).random(400_000) < share
    places = np.array([-1, *alarms(misses.tolist())])
    lengths = np.diff(places)
    assert abs(lengths.mean() - run_length(share)) < 4.0 * lengths.std() / np.sqrt(len(lengths))
    assert run_length(share) == pytest.approx(expected, abs=0.5)


def test_run_length_of_misses_alone_is_counted_by_hand() -> None:
    assert run_length(1.0) == pytest.approx(-(-LIMIT // MISS))
    assert alarms([True] * 9) == [3, 7]


def test_hits_take_the_sum_to_zero_and_no_further() -> None:
    three = [True] * 3
    assert alarms([*three, *([False] * (3 * MISS)), *three, False]) == []
    assert alarms([*([False] * 1000), *three, True]) == [1003]
