"""The tests of innovations, compiled: a bank of cumulative-sum pairs, noise, and all sensors together.

Sums are bounded at twice their interval and do not restart after a flag: one fault is one flag.
"""

from __future__ import annotations

import numpy as np

from softsensor.detection.cusum import cusum_step
from softsensor.detection.state_of_tests import (
    MISFIT,
    NOISY,
    NOISY_ENDED,
    SHIFT_CLEARED,
    SHIFT_UP,
    TestDesign,
    TestState,
)
from softsensor.estimation.compiling import inlined
from softsensor.estimation.kernel import Floats

CAP = 2.0
"""Sums stop at so many intervals, so that they come down again when a fault has gone."""
DOWN = 0.5
"""A test that was up is down again below this share of its interval."""


@inlined
def test_shift(design: TestDesign, state: TestState, i: int, z: float) -> int:
    """One cycle of a sensor's whole bank; the sensor is up while any pair of it is."""
    top, upward = 0.0, True
    high, low = state.high[i], state.low[i]
    for p in range(len(high)):
        interval = design.interval[i, p]
        one, other = cusum_step(high[p], low[p], z, design.reference[i, p], design.clip, CAP * interval)
        high[p], low[p] = one, other
        if one > top * interval:
            top, upward = one / interval, True
        if other > top * interval:
            top, upward = other / interval, False
    if state.up[i] == 0 and top > 1.0:
        state.up[i] = 1 if upward else -1
        return SHIFT_UP
    if state.up[i] != 0 and top < DOWN:
        state.up[i] = 0
        state.down_since[i] = state.cycle[0]
        return SHIFT_CLEARED
    return 0


@inlined
def test_spread(design: TestDesign, state: TestState, i: int, z: float) -> int:
    """The noise test, on differences of two readings in turn that share none: a shift of the mean does not reach them."""
    if state.held[i] != state.held[i]:
        state.held[i] = z
        return 0
    difference = (z - state.held[i]) * 0.7071067811865476
    state.held[i] = np.nan
    square = min(difference * difference, design.spread_clip * design.spread_clip)
    total = state.spread[i] + design.spread_gain * square - design.spread_drift
    state.spread[i] = min(max(total, 0.0), CAP * design.spread_interval)
    if state.noisy[i] == 0 and total > design.spread_interval:
        state.noisy[i] = 1
        return NOISY
    if state.noisy[i] == 1 and total < DOWN * design.spread_interval:
        state.noisy[i] = 0
        return NOISY_ENDED
    return 0


@inlined
def test_joint(design: TestDesign, state: TestState, squares: float) -> int:
    """All innovations together, whitened: does the model as a whole still fit? A cycle without a number is passed over."""
    if squares != squares:
        return 0
    added = state.joint[0] + design.joint_gain * squares - design.joint_drift
    state.joint[0] = min(max(added, 0.0), CAP * design.joint_interval)
    if state.misfit[0] == 0 and added > design.joint_interval:
        state.misfit[0] = 1
        return MISFIT
    if state.misfit[0] == 1 and added < DOWN * design.joint_interval:
        state.misfit[0] = 0
    return 0


@inlined
def highest_share(sums: Floats, interval: Floats) -> float:
    """The furthest of a sensor's sums (n_pairs,), as a share of its decision interval; above 1 the test is up."""
    top = 0.0
    for p in range(len(sums)):
        top = max(top, sums[p] / interval[p])
    return top
