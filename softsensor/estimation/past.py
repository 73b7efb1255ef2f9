"""What a unit remembers of its past: readings and the estimator's states, so that it can go back and forward again."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from softsensor.estimation.kernel import CHUNK, EstimatorState, Floats
from softsensor.estimation.late_readings import LateReadings
from softsensor.readings_of_cycle import CycleReadings, slice_readings

LONGEST = 128 * CHUNK
"""Cycles that are remembered at once at most."""


class Rerun(Protocol):
    """Runs the estimator over past cycles: state, first cycle, readings -> state, estimates, their sd."""

    def __call__(
        self, before: EstimatorState, first: int, readings: CycleReadings
    ) -> tuple[EstimatorState, Floats, Floats]: ...


@dataclass(frozen=True)
class Revision:
    """What going back has changed: estimates of cycles first, first + 1, ... as now known, and the states on the way."""

    first: int
    estimate: Floats
    sd: Floats
    states: tuple[tuple[int, EstimatorState], ...]


class Past:
    """A bounded memory of cycles; ``horizon`` cycles at least are kept, and the state before every CHUNK-th."""

    def __init__(self, horizon: int, n_estimates: int) -> None:
        self._chunks = -(-horizon // CHUNK)
        self._n_estimates = n_estimates
        self._states: dict[int, EstimatorState] = {}
        self._rows: _Rows | None = None
        self.next_cycle = 0

    @property
    def first_cycle(self) -> int:
        """The earliest cycle that can be gone back to."""
        return min(self._states) * CHUNK if self._states else self.next_cycle

    def room(self, most: int) -> int:
        """Cycles that may be run before they have to be remembered, ``most`` or fewer, to the end of a chunk."""
        return max(min(most, LONGEST) // CHUNK, 1) * CHUNK - self.next_cycle % CHUNK

    def remember(
        self,
        states: Iterable[tuple[int, EstimatorState]],
        readings: CycleReadings,
        estimate: Floats,
        sd: Floats,
    ) -> None:
        """Add cycles that have been run, LONGEST at most, with the state before each that begins a chunk."""
        if not len(readings):
            return
        if self._rows is None:
            capacity = self._chunks * CHUNK + LONGEST + CHUNK
            self._rows = _empty_rows(capacity, readings, self._n_estimates)
        self._states.update((cycle // CHUNK, state) for cycle, state in states)
        new = _Rows(readings, estimate, sd)
        for part, place in self._rows.places(self.next_cycle, len(readings)):
            for kept, added in zip(self._rows.arrays(), new.arrays(), strict=True):
                kept[place] = added[part]
        self.next_cycle += len(readings)
        newest = (self.next_cycle - 1) // CHUNK
        for old in [key for key in self._states if key < newest - self._chunks]:
            del self._states[old]

    def restore(
        self, cycle: int, state: EstimatorState, readings: CycleReadings, estimate: Floats, sd: Floats
    ) -> None:
        """Put back a chunk from the records: the state before ``cycle`` (a multiple of CHUNK) and what followed."""
        self.next_cycle = cycle
        self.remember([(cycle, state)], readings, estimate, sd)

    def state_before(self, cycle: int) -> tuple[int, EstimatorState] | None:
        """The nearest remembered state at or before a cycle, with its cycle; None where that is forgotten."""
        number = cycle // CHUNK
        state = self._states.get(number)
        return (number * CHUNK, state) if state is not None else None

    def readings_between(self, first: int, stop: int) -> CycleReadings:
        """Readings of remembered cycles first to stop (exclusive), all within one chunk."""
        place = self._place(first, stop)
        return slice_readings(self._kept.readings, place.start, place.stop)

    def differing(self, late: LateReadings, cycles: NDArray[np.int64]) -> NDArray[np.bool_]:
        """(N,) Which of these cycles are remembered and saw something else of the tag."""
        found = (cycles >= self.first_cycle) & (cycles < self.next_cycle)
        if not found.any():
            return found
        values, qualities = self._column(late)
        rows = cycles[found] % len(self._kept)
        same = (values[rows] == late.values[found]) | (np.isnan(values[rows]) & np.isnan(late.values[found]))
        found[found] = ~(same & (qualities[rows] == late.qualities[found]))
        return found

    def amend(self, late: LateReadings, cycles: NDArray[np.int64]) -> None:
        """Remember that these cycles, all of them remembered, see a tag so; :meth:`run_again` then has it counted."""
        values, qualities = self._column(late)
        rows = cycles % len(self._kept)
        values[rows], qualities[rows] = late.values, late.qualities

    def _column(self, late: LateReadings) -> tuple[Floats, NDArray[np.int8]]:
        kept = self._kept.readings
        if late.kind == "input":
            return kept.u[:, late.column], kept.u_quality[:, late.column]
        return kept.y[:, late.column], kept.y_quality[:, late.column]

    def estimates(self) -> tuple[int, NDArray[np.int64], Floats, Floats]:
        """First remembered cycle, then times, estimates and sd of all remembered cycles as now known."""
        first = self.first_cycle
        if first == self.next_cycle:
            empty = np.zeros((0, self._n_estimates))
            return first, np.zeros(0, dtype=np.int64), empty, empty
        kept = self._kept
        places = [place for _, place in kept.places(first, self.next_cycle - first)]
        return (
            first,
            np.concatenate([kept.readings.times[place] for place in places]),
            np.concatenate([kept.estimate[place] for place in places]),
            np.concatenate([kept.sd[place] for place in places]),
        )

    def run_again(self, cycle: int, rerun: Rerun) -> tuple[EstimatorState, Revision]:
        """Go back to the state before ``cycle`` and forward to the present; what is remembered is revised on the way."""
        number = cycle // CHUNK
        state = self._states[number]
        revised: list[Floats] = []
        spreads: list[Floats] = []
        states: list[tuple[int, EstimatorState]] = []
        while number * CHUNK < self.next_cycle:
            first = number * CHUNK
            if first > cycle:
                self._states[number] = state
                states.append((first, state))
            stop = min(first + CHUNK, self.next_cycle)
            state, estimate, sd = rerun(state, first, self.readings_between(first, stop))
            place = self._place(first, stop)
            self._kept.estimate[place] = estimate
            self._kept.sd[place] = sd
            skip = max(cycle - first, 0)
            revised.append(estimate[skip:])
            spreads.append(sd[skip:])
            number += 1
        return state, Revision(cycle, np.concatenate(revised), np.concatenate(spreads), tuple(states))

    @property
    def _kept(self) -> _Rows:
        assert self._rows is not None
        return self._rows

    def _place(self, first: int, stop: int) -> slice:
        """Rows of consecutive cycles of one chunk: the ring holds whole chunks."""
        begin = first % len(self._kept)
        return slice(begin, begin + stop - first)


@dataclass(frozen=True)
class _Rows:
    """A ring of cycles, cycle k in row k modulo its length: readings, estimates as now known and their sd."""

    readings: CycleReadings
    estimate: Floats
    sd: Floats

    def __len__(self) -> int:
        return len(self.readings)

    def arrays(self) -> tuple[NDArray[Any], ...]:
        part = self.readings
        return part.times, part.u, part.u_quality, part.y, part.y_quality, self.estimate, self.sd

    def places(self, first: int, count: int) -> Iterator[tuple[slice, slice]]:
        """Where ``count`` cycles from ``first`` on lie: rows among themselves, and rows of the ring."""
        done = 0
        while done < count:
            begin = (first + done) % len(self)
            length = min(count - done, len(self) - begin)
            yield slice(done, done + length), slice(begin, begin + length)
            done += length


def _empty_rows(capacity: int, like: CycleReadings, n_estimates: int) -> _Rows:
    inputs, sensors = like.u.shape[1], like.y.shape[1]
    readings = CycleReadings(
        np.zeros(capacity, dtype=np.int64),
        np.zeros((capacity, inputs)),
        np.zeros((capacity, inputs), dtype=np.int8),
        np.zeros((capacity, sensors)),
        np.zeros((capacity, sensors), dtype=np.int8),
    )
    return _Rows(readings, np.zeros((capacity, n_estimates)), np.zeros((capacity, n_estimates)))
