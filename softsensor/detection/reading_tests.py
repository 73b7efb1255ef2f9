"""The tests of a sensor's own readings, compiled: stuck, lost, spike. Deterministic arithmetic only."""

from __future__ import annotations

import numpy as np

from softsensor.detection.state_of_tests import (
    LOST,
    LOST_ENDED,
    SPIKE,
    STUCK,
    STUCK_ENDED,
    TestDesign,
    TestState,
)
from softsensor.estimation.compiling import inlined
from softsensor.estimation.elementary import error_function

MIN_REPEATS = 10
"""Fewer equal readings than this are never called stuck."""

SQRT_TWO = 1.4142135623730951
SQRT_THREE_HALVES = 1.224744871391589

WARM_UP = 200
"""Readings before the share of equal neighbours says anything about a sensor's resolution."""


@inlined
def test_stuck(design: TestDesign, state: TestState, i: int, value: float, slope: float) -> int:
    """A run of equal readings is judged by how often this very sensor repeats itself, and by its resolution.

    However slowly the process moves, noise of sd s leaves a reading in a cell of width q with probability erf(q / (2
    sqrt2 s)) at most. The cell is taken twice as wide, for noise that is less than the model file says. Resolution belongs
    to the reading as it is shown, noise to the scale of the model: ``slope`` carries the one over, at this value.
    """
    event = 0
    if value == state.last_value[i]:
        state.repeats[i] += 1
        cell = error_function(state.resolution[i] * slope / (SQRT_TWO * design.noise_sd[i]))
        share = max(state.equal[i] / (state.equal[i] + state.changes[i]), cell)
        state.run_probability[i] *= share
        improbable = state.run_probability[i] < design.stuck_probability
        warm = state.equal[i] + state.changes[i] + state.repeats[i] >= WARM_UP
        if state.stuck[i] == 0 and improbable and warm and state.repeats[i] >= MIN_REPEATS:
            state.stuck[i] = 1
            event = STUCK
    else:
        if state.stuck[i] == 1:
            state.stuck[i] = 0
            event = STUCK_ENDED
        else:
            state.equal[i] += state.repeats[i]
        if state.last_value[i] == state.last_value[i]:
            state.resolution[i] = min(state.resolution[i], abs(value - state.last_value[i]))
        state.changes[i] += 1
        state.repeats[i] = 0
        state.run_probability[i] = 1.0
    state.last_value[i] = value
    return event


@inlined
def test_lost(design: TestDesign, state: TestState, i: int, missing: bool) -> int:
    state.missing[i] = state.missing[i] + 1 if missing else 0
    if state.lost[i] == 0 and state.missing[i] > design.lost_after[i]:
        state.lost[i] = 1
        return LOST
    if state.lost[i] == 1 and not missing:
        state.lost[i] = 0
        return LOST_ENDED
    return 0


@inlined
def test_spike(design: TestDesign, state: TestState, i: int, z: float) -> int:
    """One reading far out between neighbours that agree, seen one cycle later; the diagnosis does not get to see it.

    It is compared with its neighbours' mean (sd of the contrast sqrt(3/2)), so that an offset makes no spikes. The
    neighbours agree within half the limit, or within a third of the spike, which the filter has half followed.
    """
    older, before = state.older_z[i], state.last_z[i]
    state.older_z[i], state.last_z[i] = before, z
    contrast = abs(before - 0.5 * (older + z))
    if contrast > SQRT_THREE_HALVES * design.spike and abs(z - older) < max(
        0.5 * design.spike, contrast / 3.0
    ):
        state.ring[(state.cycle[0] - 1) % state.ring.shape[0], i] = np.nan
        return SPIKE
    return 0
