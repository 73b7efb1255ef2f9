"""A coarse display repeats itself honestly; a frozen one does not, and is told from it."""

from __future__ import annotations

import numpy as np
import pytest
from independent.quiet_tests import new_state, quiet_design, step

from softsensor.detection.state_of_tests import STUCK

DESIGN = quiet_design(1, stuck_probability=1e-7, noise_sd=np.full(1, 0.15))


def stuck_at(readings: np.ndarray) -> int | None:
    """The first reading at which the sensor is called stuck."""
    state = new_state(1)
    for k, value in enumerate(readings):
        y = np.array([value])
        if step(DESIGN, state, y, y * 0.0) & STUCK:
            return k
    return None


def slow_process(seed: int, cycles: int, resolution: float) -> np.ndarray:
    """A wandering temperature with noise of 0.15, shown to a resolution."""
    rng = np.random.default_rng(seed)
    value = np.cumsum(0.01 * rng.normal(size=cycles)) + 0.15 * rng.normal(size=cycles)
    return np.round(value / resolution) * resolution


@pytest.mark.parametrize("resolution", [0.01, 0.1, 0.5, 1.0, 2.0])
def test_an_honest_display_is_never_stuck(resolution: float) -> None:
    for seed in range(5):
        assert stuck_at(slow_process(seed, 12_000, resolution)) is None


@pytest.mark.parametrize(("resolution", "longest"), [(0.01, 20), (0.1, 60), (0.3, 600)])
def test_a_frozen_display_is_stuck(resolution: float, longest: int) -> None:
    readings = slow_process(1, 2000, resolution)
    found = stuck_at(np.concatenate([readings, np.full(longest, readings[-1])]))
    assert found is not None
    assert found >= 2000
