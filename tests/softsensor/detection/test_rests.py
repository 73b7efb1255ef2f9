"""How long tests rest after an outage of inputs, from where their sums go on, and sensors that are not tested."""

from __future__ import annotations

import numpy as np
import pytest
from independent.quiet_tests import new_state, quiet_design, step

from softsensor.detection.state_of_tests import SETTLED, SETTLING, SHIFT_UP, SPIKE

INTERVAL = np.full((2, 1), 8.0)
Y = np.array([50.0, 60.0])


def news_of(forgotten_after: int, outage: int, cycles: int) -> dict[int, int]:
    """Cycles with news of a rest, where inputs are missing in the first ``outage`` cycles after the tenth."""
    design = quiet_design(2, interval=INTERVAL, forgotten_after=forgotten_after)
    state, found = new_state(2), {}
    for k in range(cycles):
        news = step(design, state, Y + k, np.zeros(2), doubtful=int(10 <= k < 10 + outage))
        if news & (SETTLING | SETTLED):
            found[k] = news
    return found


@pytest.mark.parametrize(("outage", "until"), [(1, 13), (4, 22), (30, 10 + 30 + 25), (200, 10 + 200 + 25)])
def test_tests_rest_three_times_as_long_as_inputs_were_missing_and_no_longer_than_the_past_shows(
    outage: int, until: int
) -> None:
    found = news_of(25, outage, until + 2)
    assert list(found) == [10, until]
    assert found[10] & SETTLING
    assert found[until] & SETTLED


def test_after_the_rest_sums_go_on_from_half_their_interval() -> None:
    design = quiet_design(2, interval=INTERVAL, armed=np.array([1, 0]))
    state = new_state(2)
    for k in range(14):
        step(design, state, Y + k, np.array([1.0, 1.0]), doubtful=int(k == 10))
        if k in (10, 12):
            assert not state.high.any()
    # the first cycle of the tests, k = 13, has added 1 - 0.5 to half of 8; the sensor that is not armed has none
    assert state.high[:, 0].tolist() == [4.5, 0.0]
    assert state.low[:, 0].tolist() == [2.5, 0.0]


def test_a_sensor_that_is_disarmed_never_goes_up_and_its_spikes_are_still_told() -> None:
    design = quiet_design(2, interval=INTERVAL, armed=np.array([1, 0]), spike=6.0)
    state = new_state(2)
    union = np.zeros(2, dtype=np.int64)
    for k in range(60):
        z = np.full(2, 2.0 if k != 30 else 40.0)
        news = step(design, state, Y + k, z)
        union |= np.array([news & SHIFT_UP, news & SPIKE])
    assert union.tolist() == [SHIFT_UP, SPIKE]
    assert state.up.tolist() == [1, 0]
    assert not state.high[1].any()
