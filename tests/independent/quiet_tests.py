"""Settings of the fault tests with everything out of reach, for tests of one test at a time."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from softsensor.detection.fault_tests import test_cycle as compiled_in
from softsensor.detection.state_of_tests import TestDesign, TestState, initial_tests

FAR = 1e6


@njit(cache=False)
def one_cycle(design, state, y, slope, moves, fresh, doubtful, quiet, z, sd, kept_out, squares, events):  # type: ignore[no-untyped-def]
    """A way in from Python: the product's own function is only there to be compiled into the loop."""
    return compiled_in(
        design, state, y, slope, moves, fresh, doubtful, quiet, z, sd, kept_out, squares, events
    )


def quiet_design(sensors: int, **settings: Any) -> TestDesign:
    """A bank of one pair a sensor, k = 0.5, that never goes up; ``settings`` replace what is under test."""
    return TestDesign(
        np.full((sensors, 1), 0.5), np.full((sensors, 1), FAR), 4.0, 2.5, 0.2778, 0.4055, FAR,
        0.18, 0.22 * sensors, FAR, FAR, np.full(sensors, 10, dtype=np.int64), 1e-8, np.ones(sensors), 6,
        np.ones(sensors, dtype=np.int64), 10**6,
    )._replace(**settings)  # fmt: skip


def new_state(sensors: int, pairs: int = 1) -> TestState:
    """Tests that have seen nothing, with a short memory."""
    return initial_tests(sensors, pairs, 1, 16)


def step(
    design: TestDesign,
    state: TestState,
    y: np.ndarray,
    z: np.ndarray,
    doubtful: int = 0,
    squares: float = 0.0,
) -> int:
    """One cycle with readings ``y`` and standardised innovations ``z``; the union of the news."""
    n = len(y)
    fresh, none, events = np.ones(n, dtype=np.int64), np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.int64)
    slope, still, sd = np.ones(n), np.zeros(1), np.ones(n)
    news = one_cycle(design, state, y, slope, still, fresh, doubtful, 0, z, sd, none, squares, events)
    return int(news)
