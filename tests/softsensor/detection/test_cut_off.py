"""A unit that hears nothing at all has lost its connection, not its sensors."""

from __future__ import annotations

import numpy as np
from independent.quiet_tests import new_state, quiet_design, step

from softsensor.detection.state_of_tests import LOST

DESIGN = quiet_design(2)


def news_of(cycles: int, doubtful: int, y: list[float]) -> int:
    """Union of all news over some cycles with the same readings."""
    state, readings, union = new_state(2), np.array(y), 0
    for _ in range(cycles):
        union |= step(DESIGN, state, readings, readings * 0.0, doubtful)
    return union


def test_sensors_are_lost_while_the_inputs_are_there() -> None:
    assert news_of(11, 0, [np.nan, np.nan]) & LOST
    assert not news_of(10, 0, [np.nan, np.nan]) & LOST


def test_one_sensor_is_lost_while_another_is_there_even_without_inputs() -> None:
    assert news_of(11, 1, [np.nan, 1.0]) & LOST


def test_nothing_is_lost_while_nothing_is_heard() -> None:
    assert not news_of(500, 1, [np.nan, np.nan]) & LOST
