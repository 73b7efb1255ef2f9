"""What the fault tests of a unit are set to, what they carry from cycle to cycle, and the bits in which they report."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

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
NOISY = 1024
NOISY_ENDED = 2048
ONSETS = 24
"""Possible onsets of a fault that the conformance probability keeps."""
MISFIT = 4096
"""The joint test over all sensors went up; no sensor's bit."""


HEAD_START = 0.5
"""Share of the decision interval at which sums go on after a rest (Lucas & Crosier 1982)."""


NO_PAIR = 1e12
"""The decision interval that stands for a pair that a sensor does not have: no sum gets there."""


class TestDesign(NamedTuple):
    """Settings of the tests, one entry per sensor where an array.

    reference, interval (n_sensors, n_pairs): the bank of cumulative-sum pairs, from the slowest to the fastest; NO_PAIR is
    the interval of a patient pair that a sensor does not have.
    """

    reference: Floats
    interval: Floats
    clip: float
    spread_clip: float
    spread_gain: float
    spread_drift: float
    """The noise test adds gain * difference^2 - drift (:mod:`softsensor.detection.spread`)."""
    spread_interval: float
    joint_gain: float
    joint_drift: float
    """The joint test adds gain * (sum of squares + sensors not in use) - drift."""
    joint_interval: float
    spike: float
    """|standardised innovation| beyond which a single reading is a spike."""
    lost_after: Ints
    """Cycles without a usable reading after which a sensor is lost."""
    stuck_probability: float
    """A run of equal readings less probable than this is a stuck sensor."""
    noise_sd: Floats
    look_every: int
    """While a test is up, the diagnosis looks again every so many cycles."""
    armed: Ints
    """0 for a sensor whose innovations are not what its tests suppose: only stuck, lost and spike are looked for."""
    forgotten_after: int
    """Cycles after which what the inputs did unseen no longer shows in the innovations."""


class TestState(NamedTuple):
    """What the tests carry from cycle to cycle; (n_sensors,) each unless said.

    high, low (n_sensors, n_pairs): the sums of the bank. spread: the noise test's sum; held: the standardised innovation
    that waits for its neighbour, nan for none. joint (1,): the joint test's sum. ring (window, n_sensors): the latest
    innovations, nan where a reading was missing; moves (window, n_inputs): the inputs' deviations beside them; cycle
    (1,): the next cycle. blocks (kept, n_sensors), block_sum, block_count (n_sensors,): the long memory
    (:mod:`softsensor.detection.long_memory`), nothing kept where no sensor is watched patiently.
    """

    high: Floats
    low: Floats
    up: Ints
    down_since: Ints
    """Cycle at which each sensor's sums last came down."""
    spread: Floats
    held: Floats
    noisy: Ints
    joint: Floats
    misfit: Ints
    """(1,) 1 while the joint test is up."""
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
    moves: Floats
    valid_from: Ints
    """(1,) First cycle whose innovations the diagnosis may use."""
    cycle: Ints
    watch: Ints
    """(1,) 1 while a flag or an undecided test needs looking after every ``look_every`` cycles."""
    resumed: Ints
    """(1,) 1 where what counts began after an outage of inputs: a fault may be older than that; -1 while the tests rest
    because the plant was moving when the run began."""
    settling_until: Ints
    """(1,) First cycle at which the tests go on after inputs were missing."""
    block: Floats
    onset: Ints
    onset_n: Floats
    onset_d: Floats
    blocks: Floats
    block_sum: Floats
    block_count: Floats
    beyond: Floats
    """The evidence of :mod:`softsensor.detection.conformance`; beyond: probability of a bias beyond the tolerance."""

    def copy(self) -> TestState:
        """A copy that shares nothing with this state."""
        return TestState(**{name: part.copy() for name, part in self._asdict().items()})

    def restart_sums(self, cycle: int) -> None:
        """All sums at zero and nothing up, in place: what comes counts from ``cycle`` on."""
        for part in (self.high, self.low, self.spread, self.joint):
            part[:] = 0.0
        self.held[:] = self.last_z[:] = self.older_z[:] = np.nan
        self.up[:] = self.misfit[:] = 0
        self.down_since[:] = cycle
        self.valid_from[0] = cycle
        self.resumed[0] = min(int(self.resumed[0]), 0)
        self.forget_evidence()

    def forget_evidence(self) -> None:
        """The conformance probability begins anew, in place."""
        for part in (self.block, self.onset_n, self.onset_d):
            part[:] = 0.0
        self.beyond[:] = np.nan
        self.onset[:] = -1

    def give_head_start(self, interval: Floats) -> None:
        """Half of each decision interval (n_sensors, n_pairs) on every sum, in place: a fault may have come in the rest."""
        start = np.where(interval < NO_PAIR, HEAD_START * interval, 0.0)
        self.high[:] = start
        self.low[:] = start


def initial_tests(
    n_sensors: int, n_pairs: int, n_inputs: int, window: int, hypotheses: int = 1, kept: int = 0
) -> TestState:
    """All sums at zero, nothing seen; ``kept``: blocks of the long memory."""

    def floats(value: float = 0.0) -> Floats:
        return np.full(n_sensors, value)

    def ints(value: int = 0, count: int = n_sensors) -> Ints:
        return np.full(count, value, dtype=np.int64)

    return TestState(
        high=np.zeros((n_sensors, n_pairs)),
        low=np.zeros((n_sensors, n_pairs)),
        up=ints(),
        down_since=ints(),
        spread=floats(),
        held=floats(np.nan),
        noisy=ints(),
        joint=np.zeros(1),
        misfit=ints(0, 1),
        last_value=floats(np.nan),
        repeats=ints(),
        run_probability=floats(1.0),
        changes=ints(9),
        equal=ints(1),
        stuck=ints(),
        missing=ints(),
        lost=ints(),
        last_z=floats(np.nan),
        older_z=floats(np.nan),
        resolution=floats(np.inf),
        ring=np.full((window, n_sensors), np.nan),
        moves=np.zeros((window, n_inputs)),
        valid_from=ints(0, 1),
        cycle=ints(0, 1),
        watch=ints(0, 1),
        resumed=ints(0, 1),
        settling_until=ints(0, 1),
        block=np.zeros(n_sensors + 1),
        onset=ints(-1, ONSETS),
        onset_n=np.zeros((ONSETS, hypotheses)),
        onset_d=np.zeros((ONSETS, hypotheses)),
        blocks=np.full((kept, n_sensors), np.nan),
        block_sum=floats(),
        block_count=floats(),
        beyond=floats(np.nan),
    )
