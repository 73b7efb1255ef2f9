"""Run lengths of the sums on squares against Monte Carlo, and the noise test on what it is made for and what it is not."""

from __future__ import annotations

import numpy as np
import pytest
from independent.quiet_tests import new_state, quiet_design, step

from softsensor.detection.run_length import RunLengthError
from softsensor.detection.spread import gain_and_drift, spread_interval, spread_run_length
from softsensor.detection.state_of_tests import MISFIT, NOISY, NOISY_ENDED


def simulated(ratio: float, count: int, interval: float, runs: int, seed: int) -> tuple[float, float]:
    """Mean run length and its standard error over independent runs (numpy, all runs side by side)."""
    random = np.random.default_rng(seed)
    sums, lengths, alive = np.zeros(runs), np.zeros(runs), np.ones(runs, dtype=bool)
    gain, drift = 0.5 * (1.0 - ratio**-2), np.log(ratio)
    while alive.any():
        squares = np.minimum(random.standard_normal((int(alive.sum()), count)) ** 2, 16.0).sum(axis=1)
        sums[alive] = np.maximum(0.0, sums[alive] + gain * squares - count * drift)
        lengths[alive] += 1.0
        alive &= sums <= interval
    return float(lengths.mean()), float(lengths.std() / np.sqrt(runs))


@pytest.mark.parametrize(
    ("ratio", "count", "interval", "clip"),
    [(1.5, 1, 3.0, 4.0), (2.0, 1, 5.0, 4.0), (1.25, 3, 3.0, np.inf), (1.25, 5, 3.0, np.inf)],
)
def test_run_lengths_against_simulation(ratio: float, count: int, interval: float, clip: float) -> None:
    mean, error = simulated(ratio, count, interval, 20_000, 3)
    assert abs(spread_run_length(ratio, count, interval, clip) / mean - 1.0) < 0.015 + 3.0 * error / mean


def test_the_interval_is_the_one_of_the_run_length() -> None:
    interval = spread_interval(1.5, 1, 50_000.0, 4.0)
    assert np.isclose(spread_run_length(1.5, 1, interval, 4.0), 50_000.0, rtol=1e-4)


def test_a_run_length_shorter_than_any_test_s_is_refused() -> None:
    with pytest.raises(RunLengthError):
        spread_interval(1.5, 1, 1.0)


def noise_design(run_length: float = 100_000.0) -> tuple[float, float, float]:
    return (*gain_and_drift(1.5), spread_interval(1.5, 1, 0.5 * run_length, 4.0))


def news(z: np.ndarray) -> list[int]:
    gain, drift, interval = noise_design()
    design = quiet_design(1, spread_gain=gain, spread_drift=drift, spread_interval=interval)
    state = new_state(1)
    return [step(design, state, np.array([value]), np.array([value])) for value in z]


def test_doubled_noise_is_found_and_ends() -> None:
    z = np.random.default_rng(1).standard_normal(3000)
    z[1000:1500] *= 2.0
    told = news(z)
    up = [k for k, code in enumerate(told) if code & NOISY]
    down = [k for k, code in enumerate(told) if code & NOISY_ENDED]
    assert len(up) == 1
    assert 1000 < up[0] < 1150
    assert len(down) == 1
    assert 1500 < down[0] < 1800


def test_a_shift_a_ramp_and_a_few_spikes_are_no_noise() -> None:
    z = np.random.default_rng(2).standard_normal(4000)
    z[500:1500] += 5.0
    z[2000:3000] += 0.02 * np.arange(1000)
    z[[3200, 3600]] += 50.0
    assert not any(code & NOISY for code in news(z))


def test_all_sensors_a_little_off_together_are_a_misfit_that_no_single_one_shows() -> None:
    design = quiet_design(
        5, joint_gain=0.18, joint_drift=5 * np.log(1.25), joint_interval=spread_interval(1.25, 5, 1e5)
    )
    state, random = new_state(5), np.random.default_rng(4)
    found = None
    for k in range(4000):
        z = random.standard_normal(5) * (1.0 if k < 2000 else 1.5)
        if step(design, state, z, z, squares=float(z @ z)) & MISFIT:
            found = k
            break
    assert found is not None
    assert 2000 < found < 2060
