"""What a unit remembers of its past: readings and the estimator's states, so that it can go back and forward again."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from softsensor.estimation.kernel import EstimatorState, Floats
from softsensor.readings_of_cycle import CycleReadings

CHUNK = 64
"""Cycles between two remembered states."""


@dataclass
class Chunk:
    """Up to CHUNK consecutive cycles: the state before the first, their readings and what was estimated."""

    before: EstimatorState
    readings: CycleReadings
    estimate: Floats
    """(CHUNK, n_estimates) as now known."""
    sd: Floats
    filled: int = 0

    def rows(self, start: int, stop: int) -> CycleReadings:
        """Readings of rows start to stop."""
        part = self.readings
        return CycleReadings(
            part.times[start:stop],
            part.u[start:stop],
            part.u_quality[start:stop],
            part.y[start:stop],
            part.y_quality[start:stop],
        )


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
    """A bounded memory of cycles; ``horizon`` cycles at least are kept."""

    def __init__(self, horizon: int, n_estimates: int) -> None:
        self._horizon = horizon
        self._n_estimates = n_estimates
        self._chunks: dict[int, Chunk] = {}
        self.next_cycle = 0

    @property
    def first_cycle(self) -> int:
        """The earliest cycle that can be gone back to."""
        return min(self._chunks) * CHUNK if self._chunks else self.next_cycle

    def room(self) -> int:
        """Cycles that fit before the next state has to be remembered."""
        return CHUNK - self.next_cycle % CHUNK

    def remember(self, before: EstimatorState, readings: CycleReadings, estimate: Floats, sd: Floats) -> None:
        """Add cycles that have been run; they must fit in :meth:`room`."""
        number, row = divmod(self.next_cycle, CHUNK)
        count = len(readings)
        if row == 0:
            self._chunks[number] = _empty_chunk(before, readings, self._n_estimates)
            self._forget(number)
        chunk = self._chunks.get(number)
        if chunk is not None:
            part = chunk.readings
            part.times[row : row + count] = readings.times
            part.u[row : row + count] = readings.u
            part.u_quality[row : row + count] = readings.u_quality
            part.y[row : row + count] = readings.y
            part.y_quality[row : row + count] = readings.y_quality
            chunk.estimate[row : row + count] = estimate
            chunk.sd[row : row + count] = sd
            chunk.filled = row + count
        self.next_cycle += count

    def restore(
        self, cycle: int, state: EstimatorState, readings: CycleReadings, estimate: Floats, sd: Floats
    ) -> None:
        """Put back a chunk from the records: the state before ``cycle`` (a multiple of CHUNK) and what followed."""
        self.next_cycle = cycle
        self.remember(state, readings, estimate, sd)

    def _forget(self, number: int) -> None:
        oldest = number - (self._horizon + CHUNK - 1) // CHUNK
        for old in [key for key in self._chunks if key < oldest]:
            del self._chunks[old]

    def state_before(self, cycle: int) -> tuple[int, EstimatorState] | None:
        """The nearest remembered state at or before a cycle, with its cycle; None where that is forgotten."""
        number = cycle // CHUNK
        chunk = self._chunks.get(number)
        return (number * CHUNK, chunk.before) if chunk is not None else None

    def readings_between(self, first: int, stop: int) -> CycleReadings:
        """Readings of cycles first to stop (exclusive), all within one chunk."""
        number, row = divmod(first, CHUNK)
        return self._chunks[number].rows(row, row + stop - first)

    def estimates(self) -> tuple[int, NDArray[np.int64], Floats, Floats]:
        """First remembered cycle, then times, estimates and sd of all remembered cycles as now known."""
        keys = sorted(self._chunks)
        if not keys:
            empty = np.zeros((0, self._n_estimates))
            return self.next_cycle, np.zeros(0, dtype=np.int64), empty, empty
        chunks = [self._chunks[key] for key in keys]
        return (
            keys[0] * CHUNK,
            np.concatenate([chunk.readings.times[: chunk.filled] for chunk in chunks]),
            np.concatenate([chunk.estimate[: chunk.filled] for chunk in chunks]),
            np.concatenate([chunk.sd[: chunk.filled] for chunk in chunks]),
        )

    def run_again(self, cycle: int, rerun: Rerun) -> tuple[EstimatorState, Revision]:
        """Go back to the state before ``cycle`` and forward to the present; what is remembered is revised on the way."""
        number = cycle // CHUNK
        state = self._chunks[number].before
        revised: list[Floats] = []
        spreads: list[Floats] = []
        states: list[tuple[int, EstimatorState]] = []
        while number * CHUNK < self.next_cycle:
            chunk = self._chunks[number]
            if number * CHUNK > cycle:
                chunk.before = state
                states.append((number * CHUNK, state))
            first = number * CHUNK
            state, estimate, sd = rerun(state, first, chunk.rows(0, chunk.filled))
            chunk.estimate[: chunk.filled] = estimate
            chunk.sd[: chunk.filled] = sd
            skip = max(cycle - first, 0)
            revised.append(estimate[skip:])
            spreads.append(sd[skip:])
            number += 1
        return state, Revision(cycle, np.concatenate(revised), np.concatenate(spreads), tuple(states))


def _empty_chunk(before: EstimatorState, like: CycleReadings, n_estimates: int) -> Chunk:
    inputs, sensors = like.u.shape[1], like.y.shape[1]
    readings = CycleReadings(
        np.zeros(CHUNK, dtype=np.int64),
        np.zeros((CHUNK, inputs)),
        np.zeros((CHUNK, inputs), dtype=np.int8),
        np.zeros((CHUNK, sensors)),
        np.zeros((CHUNK, sensors), dtype=np.int8),
    )
    return Chunk(before, readings, np.zeros((CHUNK, n_estimates)), np.zeros((CHUNK, n_estimates)))
