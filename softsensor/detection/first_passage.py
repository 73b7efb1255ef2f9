"""When does a cumulative-sum test speak after a fault's onset: the distribution of that time, for any course of the mean.

One sum, one step a cycle, on standardised values x(l) ~ N(m(l), 1) clipped to [-clip, clip]::

    S <- max(0, S + x - k),   a flag when S > h          k reference value, h decision interval

The sum lives on a lattice of cells around 0, w, 2 w ... with the last cell's upper edge at h, w = 2 h / (2 M - 1) (Brook &
Evans 1972). Values inside the clip fall into the cell they lie in, which adds w^2 / 12 to their variance: it is taken off
theirs (Sheppard's correction). The mass of the clipped values, an atom at either end, is shared between the two nearest
cells so that its mean is kept. The sum's distribution starts as what it settles to without a fault and goes forward
through the course of the mean, a stretch of cycles at a time.

Speed comes from three things. A stretch of cycles has its average mean: stretches grow with the time since the onset.
A stretch's mean is made of two neighbouring values of a fine grid, for as many cycles of each as give its sum; what rounding
leaves goes on to the next stretch. Powers of the transition matrix at a grid value are kept once they are known.

Times are in cycles, sums and means in standard deviations of the innovation.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]

WIDEST_CELL = 0.2
"""Standard deviations. The rate of false flags is then within 1 % of the exact one, which a test compares."""
FEWEST_CELLS, MOST_CELLS = 30, 128
GROWTH = 12
"""A stretch of cycles is at most this fraction of the time since the onset."""
LARGEST_MEAN = 9.0
"""Means beyond this are taken as this: every value is then clipped (ndtr(9 - 4) is 1 to 3e-7)."""
FINE_MEANS = 2.0
"""Up to this mean the grid is fine enough for the rate of flags, which goes as exp(2 h mean), to be right within 1 %."""
FINE_STEP, COARSE_STEP = 0.125, 1.0 / 16.0
"""Grid of means: FINE_STEP / h, never wider than COARSE_STEP, up to FINE_MEANS; COARSE_STEP beyond."""


@dataclass(frozen=True, slots=True)
class OneSum:
    """One cumulative sum of a test: reference value, decision interval, clip."""

    reference: float
    interval: float
    clip: float


@dataclass(frozen=True, eq=False)
class Course:
    """A mean over time, per unit of a fault's size: averages over growing stretches of cycles.

    ``ends`` (s,): cycles since the onset at which each stretch ends; ``means`` (s,): its average, in standard deviations
    per unit of size.
    """

    ends: NDArray[np.int64]
    means: Vector


def stretched(values: Vector, marks: tuple[int, ...]) -> Course:
    """The course of ``values`` (cycles,), one per cycle from the onset on, with stretch ends at every one of ``marks``.

    >>> stretched(np.ones(30), (5, 30)).ends.tolist()
    [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 14, 15, 16, 17, 18, 19, 20, 21, 22, 23, 24, 26, 28, 30]

    :param marks: cycles, ascending, the last one no more than there are values.
    """
    ends: list[int] = []
    lag = 0
    for mark in marks:
        while lag < mark:
            lag = min(mark, lag + max(1, lag // GROWTH))
            ends.append(lag)
    edges = np.array([0, *ends], dtype=np.int64)
    sums = np.concatenate(([0.0], np.cumsum(values[: edges[-1]])))
    return Course(edges[1:], np.diff(sums[edges]) / np.diff(edges))


def _grid(interval: float) -> Vector:
    """Means, ascending, symmetrical about zero."""
    fine = min(COARSE_STEP, FINE_STEP / interval)
    low = np.arange(0.0, FINE_MEANS, fine)
    upper = np.concatenate((low, np.arange(FINE_MEANS, LARGEST_MEAN + 0.5 * COARSE_STEP, COARSE_STEP)))
    return np.concatenate((-upper[:0:-1], upper))


@dataclass(frozen=True, eq=False)
class Passage:
    """The lattice of one sum, the distribution that it starts from, and the powers that were needed so far."""

    test: OneSum
    cells: int
    width: float
    means: Vector
    powers: dict[tuple[int, int], Matrix] = field(default_factory=dict, repr=False)
    rest: list[Vector] = field(default_factory=list, repr=False)

    def log_survival(self, course: Course, size: float, until: int) -> Vector:
        """Log of the probability of no flag up to the end of each stretch, for a fault of ``size``.

        :param until: the last end that is wanted.
        """
        state, total, carry, lag = self.at_rest(), 0.0, 0.0, 0
        found: list[float] = []
        for end, unit in zip(course.ends.tolist(), course.means.tolist(), strict=True):
            if end > until:
                break
            count = end - lag
            mean = min(max(size * unit, -LARGEST_MEAN), LARGEST_MEAN)
            place = min(max(int(np.searchsorted(self.means, mean, side="right")) - 1, 0), self.means.size - 2)
            low, high = float(self.means[place]), float(self.means[place + 1])
            wanted = count * mean + carry
            upper = min(max(round((wanted - count * low) / (high - low)), 0), count)
            carry = wanted - (count - upper) * low - upper * high
            state = self._on(self._on(state, place, count - upper), place + 1, upper)
            left = float(state.sum())
            if left < _GONE:
                return np.array(found + [-math.inf] * (int(np.sum(course.ends <= until)) - len(found)))
            state, total, lag = state / left, total + math.log(left), end
            found.append(total)
        return np.array(found)

    def at_rest(self) -> Vector:
        """(cells,) where the sum is without a fault, given that no flag is up: the quasi-stationary distribution."""
        if not self.rest:
            power = self._step(int(self.means.size // 2))
            for _ in range(_SQUARINGS):
                power = power @ power
                power = power / power.max()
            self.rest.append(power[0] / power[0].sum())
        return self.rest[0]

    def false_rate(self) -> float:
        """Rate of false flags of this sum per cycle, while none is up: survival over n cycles is exp(-rate n)."""
        return -math.log(float((self.at_rest() @ self._step(int(self.means.size // 2))).sum()))

    def _on(self, state: Vector, place: int, count: int) -> Vector:
        doublings = 0
        while count:
            if count & 1:
                state = state @ self._power(place, doublings)
            count >>= 1
            doublings += 1
        return state

    def _power(self, place: int, doublings: int) -> Matrix:
        """The transition matrix at a grid value, to the power 2^doublings."""
        key = (place, doublings)
        if key not in self.powers:
            if doublings == 0:
                self.powers[key] = self._step(place)
            else:
                half = self._power(place, doublings - 1)
                self.powers[key] = half @ half
        return self.powers[key]

    def _step(self, place: int) -> Matrix:
        """(cells, cells), sub-stochastic: what is missing in a row has passed the interval."""
        mean, test, w, count = float(self.means[place]), self.test, self.width, self.cells
        # chance that the sum moves by at most d cells, d = -count .. count
        moves = np.arange(-count, count + 1)
        sd = math.sqrt(1.0 - w * w / 12.0)
        below, above = (-test.clip - mean) / sd, (test.clip - mean) / sd
        edges = np.clip((moves + 0.5) * w + test.reference, -test.clip, test.clip)
        inside = ndtr((edges - mean) / sd) - ndtr(below)
        down = float(ndtr(below)) * _reached(moves, -(test.clip + test.reference) / w)
        up = float(ndtr(-above)) * _reached(moves, (test.clip - test.reference) / w)
        at_most = inside + up + down
        cell = np.arange(count)
        step: Matrix = np.diff(at_most, prepend=0.0)[count + cell[None, :] - cell[:, None]]
        step[:, 0] = at_most[count - cell]
        return step


_SQUARINGS = 30
_GONE = 1e-200


def _reached(moves: NDArray[np.int64], atom: float) -> Vector:
    """Share of an atom, a move by ``atom`` cells, that moves of at most ``moves`` cells include; its mean is kept."""
    return np.asarray(np.clip(moves + 1.0 - atom, 0.0, 1.0), dtype=np.float64)


def passage(test: OneSum) -> Passage:
    """The lattice of one sum."""
    cells = min(max(math.ceil(test.interval / WIDEST_CELL), FEWEST_CELLS), MOST_CELLS)
    return Passage(test, cells, 2.0 * test.interval / (2.0 * cells - 1.0), _grid(test.interval))
