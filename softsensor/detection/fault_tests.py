"""The per-sensor tests of one cycle, compiled: cumulative sums, stuck, lost, spike. Deterministic arithmetic only.

A test says that a sensor's innovations are not what they should be; which instrument is at fault, if any, is the
diagnosis's business. Sums are bounded by ``cap`` and do not restart after a flag.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from softsensor.detection.cusum import cusum_step
from softsensor.detection.elementary import error_function
from softsensor.estimation.kernel import Floats, Ints

SHIFT_UP = 1
SHIFT_CLEARED = 2
STUCK = 4
STUCK_ENDED = 8
LOST = 16
LOST_ENDED = 32
SPIKE = 64
LOOK = 128
SETTLING = 256
SETTLED = 512

MIN_REPEATS = 10
"""Fewer equal readings than this are never called stuck."""

SETTLING_SHARE = 3
"""After inputs have been missing the tests rest until this many times that long has passed since they went missing: what
the inputs did meanwhile is not in the prediction."""

SQRT_TWO = 1.4142135623730951
SQRT_THREE_HALVES = 1.224744871391589

WARM_UP = 200
"""Readings before the share of equal neighbours says anything about a sensor's resolution."""


class TestDesign(NamedTuple):
    """Settings of the tests, one entry per sensor where an array."""

    reference: Floats
    interval: Floats
    clip: float
    spike: float
    """|standardised innovation| beyond which a single reading is a spike."""
    lost_after: Ints
    """Cycles without a usable reading after which a sensor is lost."""
    stuck_probability: float
    """A run of equal readings less probable than this is a stuck sensor."""
    noise_sd: Floats
    look_every: int
    """While a test is up, the diagnosis looks again every so many cycles."""


class TestState(NamedTuple):
    """What the tests carry from cycle to cycle; (n_sensors,) each unless said.

    high_since and low_since: cycle at which each sum last left zero, the plain estimate of a shift's onset.
    ring (window, n_sensors): the latest innovations, nan where a reading was missing; cycle (1,): the next cycle.
    """

    high: Floats
    low: Floats
    high_since: Ints
    low_since: Ints
    up: Ints
    down_since: Ints
    """Cycle at which each sensor's sums last came down."""
    last_value: Floats
    repeats: Ints
    run_probability: Floats
    changes: Ints
    equal: Ints
    stuck: Ints
    missing: Ints
    lost: Ints
    last_z: Floats
    older_z: Floats
    resolution: Floats
    """Smallest change between two readings seen so far; infinite before the first."""
    ring: Floats
    valid_from: Ints
    """(1,) First cycle whose innovations the diagnosis may use."""
    cycle: Ints
    watch: Ints
    """(1,) 1 while a flag or an undecided test needs looking after every ``look_every`` cycles."""
    settling_until: Ints
    """(1,) First cycle at which the tests go on after inputs were missing."""

    def copy(self) -> TestState:
        """A copy that shares nothing with this state."""
        return TestState(**{name: part.copy() for name, part in self._asdict().items()})


def initial_tests(n_sensors: int, window: int) -> TestState:
    """All sums at zero, nothing seen."""

    def floats(value: float = 0.0) -> Floats:
        return np.full(n_sensors, value)

    def ints(value: int = 0) -> Ints:
        return np.full(n_sensors, value, dtype=np.int64)

    return TestState(
        floats(),
        floats(),
        ints(),
        ints(),
        ints(),
        ints(),
        floats(np.nan),
        ints(),
        floats(1.0),
        ints(9),
        ints(1),
        ints(),
        ints(),
        ints(),
        floats(),
        floats(),
        floats(np.inf),
        np.full((window, n_sensors), np.nan),
        np.zeros(1, dtype=np.int64),
        np.zeros(1, dtype=np.int64),
        np.zeros(1, dtype=np.int64),
        np.zeros(1, dtype=np.int64),
    )


@njit(cache=True)
def _test_shift(design: TestDesign, state: TestState, i: int, z: float) -> int:
    cap = 2.0 * design.interval[i]
    high, low = cusum_step(state.high[i], state.low[i], z, design.reference[i], design.clip, cap)
    now = state.cycle[0]
    if state.high[i] == 0.0 and high > 0.0:
        state.high_since[i] = now
    if state.low[i] == 0.0 and low > 0.0:
        state.low_since[i] = now
    state.high[i] = high
    state.low[i] = low
    top = max(high, low)
    if state.up[i] == 0 and top > design.interval[i]:
        state.up[i] = 1 if high >= low else -1
        return SHIFT_UP
    if state.up[i] != 0 and top < 0.5 * design.interval[i]:
        state.up[i] = 0
        state.down_since[i] = now
        return SHIFT_CLEARED
    return 0


@njit(cache=True)
def _test_stuck(design: TestDesign, state: TestState, i: int, value: float) -> int:
    """A run of equal readings is judged by how often this very sensor repeats itself, and by its resolution.

    However slowly the process moves, noise of sd s leaves a reading in a cell of width q with probability erf(q / (2
    sqrt2 s)) at most. The cell is taken twice as wide, for noise that is less than the model file says.
    """
    event = 0
    if value == state.last_value[i]:
        state.repeats[i] += 1
        cell = error_function(state.resolution[i] / (SQRT_TWO * design.noise_sd[i]))
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


@njit(cache=True)
def _test_lost(design: TestDesign, state: TestState, i: int, missing: bool) -> int:
    state.missing[i] = state.missing[i] + 1 if missing else 0
    if state.lost[i] == 0 and state.missing[i] > design.lost_after[i]:
        state.lost[i] = 1
        return LOST
    if state.lost[i] == 1 and not missing:
        state.lost[i] = 0
        return LOST_ENDED
    return 0


@njit(cache=True)
def _test_spike(design: TestDesign, state: TestState, i: int, z: float) -> int:
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


@njit(cache=True)
def _settle(state: TestState, doubtful: int) -> int:
    """Rest the tests of innovations while inputs are missing and for a while after; returns the news."""
    now, until = state.cycle[0], state.settling_until[0]
    if doubtful != 0:
        state.settling_until[0] = max(until, now) + SETTLING_SHARE
        return SETTLING if until <= now else 0
    if now == until and now > 0:
        state.valid_from[0] = now
        return SETTLED
    return 0


@njit(cache=True)
def _rest(state: TestState, i: int) -> None:
    state.high[i] = 0.0
    state.low[i] = 0.0
    state.up[i] = 0
    state.down_since[i] = state.cycle[0]
    state.last_z[i] = 0.0
    state.older_z[i] = 0.0


@njit(cache=True)
def _cut_off(y: Floats, doubtful: int) -> bool:
    """Inputs and all sensors missing together: the connection or the service was away, no sensor is lost."""
    if doubtful == 0:
        return False
    for i in range(len(y)):  # noqa: SIM110 (compiled)
        if y[i] == y[i]:
            return False
    return True


@njit(cache=True)
def test_cycle(
    design: TestDesign,
    state: TestState,
    y: Floats,
    fresh: Ints,
    doubtful: int,
    quiet: int,
    innovation: Floats,
    sd: Floats,
    events: Ints,
) -> int:
    """Run all tests on one cycle's innovations; events (n_sensors,) gets the bits, the return value their union.

    ``fresh`` is 0 for a value that the assembly repeated (reported on change): it is no evidence of being stuck.
    ``doubtful`` is 1 where an input is missing or too old. ``quiet`` is 1 where a person has let the tests rest: only
    lost sensors are looked for.
    """
    union = _settle(state, doubtful)
    resting = quiet != 0 or state.cycle[0] < state.settling_until[0]
    slot = state.cycle[0] % state.ring.shape[0]
    cut_off = _cut_off(y, doubtful)
    for i in range(len(y)):
        missing = y[i] != y[i]
        code = 0 if cut_off else _test_lost(design, state, i, missing)
        state.ring[slot, i] = innovation[i]
        if resting:
            _rest(state, i)
        elif not missing:
            z = innovation[i] / sd[i]
            code |= _test_shift(design, state, i, z)
            code |= _test_spike(design, state, i, z)
        if quiet == 0 and not missing and fresh[i] != 0:
            code |= _test_stuck(design, state, i, y[i])
        events[i] = code
        union |= code
    state.cycle[0] += 1
    if state.watch[0] != 0 and state.cycle[0] % design.look_every == 0:
        union |= LOOK
    return union
