"""A unit that hears nothing at all has lost its connection, not its sensors."""

from __future__ import annotations

import numpy as np

from softsensor.detection import fault_tests

DESIGN = fault_tests.TestDesign(
    reference=np.full(2, 0.5),
    interval=np.full(2, 8.0),
    clip=4.0,
    spike=6.0,
    lost_after=np.full(2, 10, dtype=np.int64),
    stuck_probability=1e-8,
    noise_sd=np.ones(2),
    look_every=6,
)


def news_of(cycles: int, doubtful: int, y: list[float]) -> int:
    """Union of all news over some cycles with the same readings."""
    state, fresh = fault_tests.initial_tests(2, 16), np.ones(2, dtype=np.int64)
    readings, events, union = np.array(y), np.zeros(2, dtype=np.int64), 0
    for _ in range(cycles):
        union |= fault_tests.test_cycle(
            DESIGN, state, readings, fresh, doubtful, 0, readings * 0.0, np.ones(2), events
        )
    return union


def test_sensors_are_lost_while_the_inputs_are_there() -> None:
    assert news_of(11, 0, [np.nan, np.nan]) & fault_tests.LOST
    assert not news_of(10, 0, [np.nan, np.nan]) & fault_tests.LOST


def test_one_sensor_is_lost_while_another_is_there_even_without_inputs() -> None:
    assert news_of(11, 1, [np.nan, 1.0]) & fault_tests.LOST


def test_nothing_is_lost_while_nothing_is_heard() -> None:
    assert not news_of(500, 1, [np.nan, np.nan]) & fault_tests.LOST
