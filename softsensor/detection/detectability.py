"""The detectability sheet: the smallest step and the slowest ramp of each sensor that its own tests find in time.

Found means: with 90 % probability one of the sensor's own sums passes its interval within that time after the onset, false
flags not counted. With the sums at rest before, every reading there, and the model right::

    1 - P(no flag with the fault) / P(no flag without it) = 0.9

for the sum of the bank that needs the smallest size, in either direction. The others can only add to it, so the whole
bank finds such a fault with 90 % or a little more. The mean of the innovation is the fault's signature through the
settled filter: a step of size b leaves b s(l), a ramp of b per cycle leaves b (s(0) + ... + s(l)), l cycles after the onset.

Sizes are in the sensor's unit; ramps in that unit per cycle here, per day in the report.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.special import ndtri

from softsensor.detection.first_passage import Course, OneSum, Passage, passage, stretched
from softsensor.detection.signatures import Shape
from softsensor.detection.state_of_tests import NO_PAIR, TestDesign
from softsensor.estimation.kernel import Floats

FOUND = 0.9
"""Probability with which a fault of the printed size is found."""
HORIZONS = (3600.0, 8 * 3600.0, 24 * 3600.0, 7 * 86400.0)
"""Seconds after the onset."""
DAY = 86400.0

_EITHER_WAY = 0.02
"""The sum against the fault's direction is looked at where the signature turns round by this share of its largest value."""
_WIDTH = 2e-3
"""Relative width to which a size is solved."""
_CLOSE = 1e-3
"""A probability within this of the wanted one is the wanted one."""
_NEARLY = 5e-3
"""... so near to it that a time is given: where a fault is absorbed the last half percent may take hours."""
_FURTHEST = 6.0
"""Probits beyond this are taken as this."""


@dataclass(frozen=True, slots=True)
class Findable:
    """What of an instrument's faults is found, per time of HORIZONS: the smallest step (unit) and the slowest ramp (unit per
    day), None where none that stays within the width of its range; ``tolerance_within``: seconds within which a step of
    its tolerance is found, None where the last of HORIZONS is not enough.
    """

    steps: tuple[float | None, ...]
    ramps: tuple[float | None, ...]
    tolerance_within: float | None


@dataclass(frozen=True, slots=True)
class Sizes:
    """Of one instrument, in its unit: its tolerance, and the width of its range, beyond which no fault is looked at."""

    tolerance: float
    span: float


@dataclass(frozen=True, slots=True)
class Bank:
    """The sums that watch one sensor in either direction: reference values and intervals (pairs,), and their clip."""

    references: tuple[float, ...]
    intervals: tuple[float, ...]
    clip: float

    def passages(self) -> tuple[Passage, ...]:
        """One lattice per pair."""
        return tuple(
            passage(OneSum(k, h, self.clip)) for k, h in zip(self.references, self.intervals, strict=True)
        )


def bank_of(design: TestDesign, sensor: int) -> Bank:
    """The sums of one sensor as the service runs them."""
    has = design.interval[sensor] < NO_PAIR
    references, intervals = design.reference[sensor][has], design.interval[sensor][has]
    return Bank(tuple(references.tolist()), tuple(intervals.tolist()), design.clip)


class Watch(NamedTuple):
    """One sum, and the courses that a unit step and a ramp of one unit per cycle leave in the innovation it watches."""

    one: Passage
    step: Course
    ramp: Course


@dataclass(frozen=True, eq=False)
class Watched:
    """An instrument and all sums that its fault is to set off.

    ``marks``: cycles in each of HORIZONS, though no more than in the false-flag interval: later than that a false flag is
    no rarer than a true one.
    """

    sums: tuple[Watch, ...]
    marks: tuple[int, ...]
    sample_time: float

    def seconds_until_found(self, shape: Shape, size: float, share: float = FOUND) -> float | None:
        """Time within which a share of all faults of ``size`` (a ramp's per cycle) is found.

        None where the last of HORIZONS is too short for it.
        """
        cycles = cycles_until_found(self.of(shape), size, share)
        return None if cycles is None else cycles * self.sample_time

    def of(self, shape: Shape) -> list[tuple[Passage, Course]]:
        """Each sum with the course that a fault of this shape leaves."""
        return [(watch.one, watch.step if shape == "step" else watch.ramp) for watch in self.sums]


def watched(
    looking: Sequence[tuple[Bank, Floats]], sample_time: float, false_flag_interval: float
) -> Watched:
    """An instrument, ready to be asked.

    :param looking: a sensor's bank, and what a unit step of the instrument's error leaves in that sensor's innovation, in
        its sd: one value per cycle, up to the last of HORIZONS at least.
    :param sample_time, false_flag_interval: in seconds.
    """
    promised = int(false_flag_interval / sample_time)
    marks = tuple(min(mark, promised) for mark in horizon_cycles(sample_time))
    real = tuple(mark for mark in marks if mark > 0)
    sums: list[Watch] = []
    for bank, signature in looking:
        step, ramp = stretched(signature, real), stretched(np.cumsum(signature), real)
        sums += [Watch(one, step, ramp) for one in bank.passages()]
    return Watched(tuple(sums), marks, sample_time)


def findable(instrument: Watched, sizes: Sizes) -> Findable:
    """The sheet's line of one instrument."""
    real = tuple(mark for mark in instrument.marks if mark > 0)
    missing = (None,) * (len(instrument.marks) - len(real))
    steps = _smallest(instrument.of("step"), real, [sizes.span for _ in real])
    ramps = _smallest(instrument.of("ramp"), real, [sizes.span / mark for mark in real])
    per_day = DAY / instrument.sample_time
    return Findable(
        (*missing, *steps),
        (*missing, *(None if size is None else size * per_day for size in ramps)),
        instrument.seconds_until_found("step", sizes.tolerance),
    )


def horizon_cycles(sample_time: float) -> tuple[int, ...]:
    """Whole cycles in each of HORIZONS.

    >>> horizon_cycles(60.0)
    (60, 480, 1440, 10080)
    """
    return tuple(int(horizon / sample_time + 1e-9) for horizon in HORIZONS)


def cycles_until_found(
    sums: Sequence[tuple[Passage, Course]], size: float, share: float = FOUND
) -> int | None:
    """Cycles within which a share of all faults of ``size`` is found; None where the courses are not long enough."""
    found = None
    for one, course in sums:
        last = int(course.ends[-1]) if course.ends.size else 0
        for side in _sides(course):
            missed = _Search(one, course, last, side).missed(size)
            late = np.flatnonzero(missed <= 1.0 - share + _NEARLY)
            if late.size:
                found = min(int(course.ends[late[0]]), last if found is None else found)
    return found


def _sides(course: Course) -> tuple[float, ...]:
    """Directions to look at: the fault's own, and the other where the signature turns round.

    Leaving one out errs on the safe side: the size found can only be too large.
    """
    turns = course.means.min(initial=0.0) < -_EITHER_WAY * np.abs(course.means).max(initial=0.0)
    return (1.0, -1.0) if turns else (1.0,)


def _smallest(
    sums: Sequence[tuple[Passage, Course]], marks: Sequence[int], largest: Sequence[float]
) -> tuple[float | None, ...]:
    """The smallest size found by each of ``marks``; a longer time never needs a larger one."""
    found: list[float | None] = []
    best: float | None = None
    for mark, limit in zip(marks, largest, strict=True):
        best = None if best is None else min(best, limit)
        for one, course in sums:
            for side in _sides(course):
                best = _better(_Search(one, course, mark, side), best, limit)
        found.append(best)
    return tuple(found)


def _better(search: _Search, best: float | None, limit: float) -> float | None:
    upper = limit if best is None else best
    above = search.surplus(upper)
    return best if above < 0.0 else search.solve(upper, above)


@dataclass(frozen=True, eq=False)
class _Search:
    """One sum, one course, one time: which size is found?"""

    one: Passage
    course: Course
    mark: int
    side: float

    def missed(self, size: float) -> Floats:
        """Probability that the fault is not found by the end of each stretch, false flags not counted."""
        left = self.one.log_survival(self.course, self.side * size, self.mark)
        missed: Floats = np.exp(np.minimum(left + self.one.false_rate() * self.course.ends[: left.size], 0.0))
        return missed

    def surplus(self, size: float) -> float:
        """Probability of being found, as a probit, less that of FOUND."""
        probit = -float(ndtri(self.missed(size)[-1]))
        return min(max(probit, -_FURTHEST), _FURTHEST) - float(ndtri(FOUND))

    def guess(self) -> float:
        """The size whose mean carries the sum to its interval, with a 90 % allowance for noise; inf for none."""
        chosen = self.course.ends <= self.mark
        ends = np.concatenate(([0], self.course.ends[chosen]))
        lengths = np.diff(ends)
        risen = np.concatenate(([0.0], np.cumsum(self.side * self.course.means[chosen] * lengths)))
        ways = ((ends[1:], risen[1:]), (self.mark - ends[:-1], risen[-1] - risen[:-1]))
        best = math.inf
        for cycles, gained in ways:
            needed = self.one.test.interval + self.one.test.reference * cycles + 1.28 * np.sqrt(cycles)
            sizes = needed[gained > 0.0] / gained[gained > 0.0]
            best = min(best, float(sizes.min(initial=math.inf)))
        return best

    def solve(self, upper: float, above: float) -> float:
        """The size at which the surplus is zero, below ``upper``, whose surplus ``above`` is not negative."""
        low = min(self.guess(), 0.98 * upper)
        below = self.surplus(low)
        high = upper
        while below >= 0.0:
            high, above = low, below
            low *= 0.8
            below = self.surplus(low)
        while high > (1.0 + _WIDTH) * low:
            if above > 4.0 or high > 1.5 * low:
                middle = min(1.2 * low, math.sqrt(low * high))
            else:
                middle = low + (high - low) * min(max(-below / (above - below), 0.02), 0.98)
            value = self.surplus(middle)
            if abs(value) < _CLOSE:
                return middle
            if value >= 0.0:
                high, above = middle, value
            else:
                low, below = middle, value
        return high
