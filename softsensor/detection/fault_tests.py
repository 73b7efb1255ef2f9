"""The fault tests of one cycle, compiled. Deterministic arithmetic only.

A test says that a sensor's innovations are not what they should be; which instrument is at fault, if any, is the
diagnosis's business.
"""

from __future__ import annotations

import numpy as np

from softsensor.detection.long_memory import remember
from softsensor.detection.reading_tests import test_lost, test_spike, test_stuck
from softsensor.detection.shift_tests import test_joint, test_shift, test_spread
from softsensor.detection.state_of_tests import (
    HEAD_START,
    LOOK,
    NO_PAIR,
    SETTLED,
    SETTLING,
    TestDesign,
    TestState,
)
from softsensor.estimation.compiling import inlined
from softsensor.estimation.kernel import Floats, Ints

SETTLING_SHARE = 3
"""After inputs have been missing the tests rest until this many times that long has passed since they went missing: what
the inputs did meanwhile is not in the prediction. No longer, though, than until it shows no more in the innovations."""


@inlined
def _settle(design: TestDesign, state: TestState, doubtful: int) -> int:
    """Rest the tests of innovations while inputs are missing and for a while after; returns the news."""
    now, until = state.cycle[0], state.settling_until[0]
    if doubtful != 0:
        state.settling_until[0] = min(
            max(until, now) + SETTLING_SHARE, max(until, now + 1 + design.forgotten_after)
        )
        return SETTLING if until <= now else 0
    if now == until and now > 0:
        state.valid_from[0] = now
        state.resumed[0] = 0 if state.resumed[0] < 0 else 1
        for i in range(design.interval.shape[0]):
            for p in range(design.interval.shape[1]):
                has = design.armed[i] != 0 and design.interval[i, p] < NO_PAIR
                state.high[i, p] = HEAD_START * design.interval[i, p] if has else 0.0
                state.low[i, p] = state.high[i, p]
        return SETTLED
    return 0


@inlined
def _rest(state: TestState, i: int) -> None:
    state.high[i] = 0.0
    state.low[i] = 0.0
    state.up[i] = 0
    state.down_since[i] = state.cycle[0]
    state.spread[i] = 0.0
    state.held[i] = np.nan
    state.last_z[i] = np.nan
    state.older_z[i] = np.nan


@inlined
def _cut_off(y: Floats, doubtful: int) -> bool:
    """Inputs and all sensors missing together: the connection or the service was away, no sensor is lost."""
    if doubtful == 0:
        return False
    for i in range(len(y)):  # noqa: SIM110 (compiled)
        if y[i] == y[i]:
            return False
    return True


@inlined
def test_cycle(
    design: TestDesign,
    state: TestState,
    y: Floats,
    slope: Floats,
    moves: Floats,
    fresh: Ints,
    doubtful: int,
    quiet: int,
    innovation: Floats,
    sd: Floats,
    kept_out: Ints,
    squares: float,
    events: Ints,
) -> int:
    """Run all tests on one cycle's innovations; events (n_sensors,) gets the bits, the return value their union.

    ``y`` (n_sensors,): readings as shown, nan where there is none; ``slope``: how fast their values in model scale move
    with them. ``moves``: the inputs, as deviations. ``fresh`` is 0 for a value that the assembly repeated (reported on
    change): it is no evidence of being stuck. ``doubtful`` is 1 where an input is missing or too old. ``quiet`` is 1 where
    a person has let the tests rest: only lost sensors are looked for. ``kept_out`` (n_sensors,) is 1 where the gate has
    kept a reading from the estimate: a single impossible one is a spike, or noise, and no shift. ``squares``: sum of
    squares of the whitened innovations, a reading at a time, over the sensors in use; nan where one of them is missing.
    """
    union = _settle(design, state, doubtful)
    resting = quiet != 0 or state.cycle[0] < state.settling_until[0]
    slot = state.cycle[0] % state.ring.shape[0]
    cut_off = _cut_off(y, doubtful)
    for j in range(len(moves)):
        state.moves[slot, j] = moves[j]
    for i in range(len(y)):
        missing = y[i] != y[i]
        code = 0 if cut_off else test_lost(design, state, i, missing)
        state.ring[slot, i] = innovation[i] if kept_out[i] == 0 else np.nan
        if resting:
            _rest(state, i)
        elif not missing:
            z = innovation[i] / sd[i]
            if design.armed[i] != 0:
                if kept_out[i] == 0:
                    code |= test_shift(design, state, i, z)
                code |= test_spread(design, state, i, z)
            code |= test_spike(design, state, i, z)
        if quiet == 0 and not missing and fresh[i] != 0:
            code |= test_stuck(design, state, i, y[i], slope[i])
        events[i] = code
        union |= code
    if resting:
        state.joint[0] = 0.0
        state.misfit[0] = 0
    else:
        union |= test_joint(design, state, squares)
    if len(state.blocks) > 0:
        remember(state, slot)
    state.cycle[0] += 1
    if state.watch[0] != 0 and state.cycle[0] % design.look_every == 0:
        union |= LOOK
    return union
