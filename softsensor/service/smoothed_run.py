"""Estimates once more, each given all readings and laboratory results of consecutive cycles: for review.

What the cycles saw goes to a temporary file; then the filter runs forward once more with the laboratory results and
left-out sensors as known at the end, keeping a state every CHUNK cycles, and the smoother runs backward, chunk by chunk.
Memory holds one chunk; what grows with the period is on disk, and gone afterwards. :class:`SmoothedRun` does that for a
replay, :mod:`softsensor.service.smoothed_window` for a period on record.
"""

from __future__ import annotations

import tempfile
from bisect import bisect_left
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import IO, Any

import numpy as np
from numpy.typing import NDArray

from softsensor.cycle import LabAtCycle, UnitDesign, UnsoundArithmetic, block_inputs, start
from softsensor.detection.flags import FlagBook
from softsensor.errors import ReplayError
from softsensor.estimation.kernel import EstimatorState
from softsensor.estimation.late_readings import LateReadings
from softsensor.estimation.schedules import private
from softsensor.estimation.smoothing import (
    ScalarReadings,
    SmoothedCycles,
    Trace,
    empty_trace,
    last_adjoint,
    run_backward,
    run_forward,
)
from softsensor.readings_of_cycle import CycleReadings, join_readings
from softsensor.service.replay import Replay, Stretch
from softsensor.service.unit_run import slice_readings

CHUNK = 256
"""Cycles between two kept states; the filter's steps are kept for one chunk at a time."""
ROWS = 8192
"""Cycles handed out at a time: tables cost by the piece."""
IN_MEMORY = 16 * 2**20
"""Bytes up to which nothing goes to disk."""


class Shelf:
    """Groups of arrays in a temporary file, put one after the other and read back in any order."""

    def __init__(self, folder: Path | None = None) -> None:
        place = None if folder is None else str(folder)
        self._file: IO[bytes] = tempfile.SpooledTemporaryFile(IN_MEMORY, dir=place)  # noqa: SIM115
        self._places: list[tuple[int, int]] = []

    def __len__(self) -> int:
        return len(self._places)

    def put(self, arrays: Iterable[NDArray[Any]]) -> None:
        """Add a group behind the others."""
        group = tuple(arrays)
        with _plain_errors():
            self._places.append((self._file.seek(0, 2), len(group)))
            for array in group:
                np.save(self._file, array, allow_pickle=False)

    def get(self, number: int) -> tuple[NDArray[Any], ...]:
        """The group put as the ``number``-th, the first one 0."""
        place, count = self._places[number]
        with _plain_errors():
            self._file.seek(place)
            return tuple(np.load(self._file, allow_pickle=False) for _ in range(count))

    def close(self) -> None:
        """Remove the file."""
        self._file.close()


@contextmanager
def _plain_errors() -> Iterator[None]:
    try:
        yield
    except OSError as error:
        raise ReplayError(f"temporary file of the smoother: {error.strerror or error}") from None


@dataclass(frozen=True)
class Known:
    """What consecutive cycles are smoothed with, as known when that is done.

    :param estimator: the state before the first cycle, with everything from before it.
    :param first: the first cycle's number.
    :param labs: the laboratory results that count within these cycles, in order of cycle.
    :param book: which sensors are left out, and when.
    :param late: what these cycles came to see later, in the order in which it was learnt.
    """

    estimator: EstimatorState
    first: int
    labs: tuple[LabAtCycle, ...]
    book: FlagBook
    late: tuple[LateReadings, ...] = ()


class Smoother:
    """Smooths consecutive cycles: :meth:`keep` what they saw, in order, then ask for :meth:`cycles`.

    :param folder: where the temporary files go; by default the system's own place.
    :param chunk: cycles between two kept states; the results do not depend on it.
    """

    def __init__(self, design: UnitDesign, folder: Path | None = None, chunk: int = CHUNK) -> None:
        self._design = design
        self._chunk = chunk
        self._loose: list[CycleReadings] = []
        self._readings, self._states, self._smoothed = Shelf(folder), Shelf(folder), Shelf(folder)

    def __enter__(self) -> Smoother:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for shelf in (self._readings, self._states, self._smoothed):
            shelf.close()

    def keep(self, readings: CycleReadings) -> None:
        """What the next cycles saw."""
        self._loose.append(readings)
        if sum(len(part) for part in self._loose) >= self._chunk:
            whole = join_readings(self._loose)
            row = 0
            while row + self._chunk <= len(whole):
                self._shelve(slice_readings(whole, row, row + self._chunk))
                row += self._chunk
            self._loose = [slice_readings(whole, row, len(whole))]

    def _shelve(self, part: CycleReadings) -> None:
        self._readings.put((part.times, part.u, part.u_quality, part.y, part.y_quality))

    def cycles(self, known: Known) -> Iterator[SmoothedCycles]:
        """All cycles kept, in order of time; worked out once.

        :raises UnsoundArithmetic: a variance is not positive.
        :raises ReplayError: the temporary file cannot be written.
        """
        rest = [part for part in self._loose if len(part)]
        if rest:
            self._shelve(join_readings(rest))
        self._loose = []
        if not len(self._smoothed):
            interval = _Interval(self._design, known)
            self._forward(interval)
            self._backward(interval)
        at_once = max(1, ROWS // self._chunk)
        for stop in range(len(self._smoothed), 0, -at_once):
            first = max(stop - at_once, 0)
            parts = [self._smoothed.get(number) for number in range(stop - 1, first - 1, -1)]
            yield SmoothedCycles(*(np.concatenate(columns) for columns in zip(*parts, strict=True)))

    def _forward(self, interval: _Interval) -> None:
        """Keep the state before every chunk."""
        estimator = interval.known.estimator.copy()
        for number in range(len(self._readings)):
            self._states.put(estimator)
            data = interval.readings(number * self._chunk, self._chunk_of(number, interval))
            interval.forward(estimator, data, number * self._chunk)

    def _backward(self, interval: _Interval) -> None:
        kernel = self._design.kernel
        scale = np.array([item.interval_scale for item in self._design.model.spec.estimates])
        adjoint = last_adjoint(kernel)
        for number in range(len(self._readings) - 1, -1, -1):
            row, part = number * self._chunk, self._chunk_of(number, interval)
            data = interval.readings(row, part)
            trace = interval.forward(EstimatorState(*self._states.get(number)), data, row)
            mean = np.zeros((len(part), kernel.n_estimates))
            variance = np.zeros_like(mean)
            if not run_backward(private(kernel), data, trace, adjoint, mean, variance):
                raise interval.unsound(row)
            self._smoothed.put((part.times, mean, np.sqrt(variance) * scale))

    def _chunk_of(self, number: int, interval: _Interval) -> CycleReadings:
        """What the cycles of a chunk saw, and what came late for them."""
        part = CycleReadings(*self._readings.get(number))
        for late in interval.late_of(part):
            inside = (late.times >= part.times[0]) & (late.times <= part.times[-1])
            if inside.any():
                rows = np.searchsorted(part.times, late.times[inside])
                of_inputs = late.kind == "input"
                (part.u if of_inputs else part.y)[rows, late.column] = late.values[inside]
                (part.u_quality if of_inputs else part.y_quality)[rows, late.column] = late.qualities[inside]
        return part


class SmoothedRun:
    """Smooths one replay: pass its stretches through :meth:`keeping`, then ask for :meth:`cycles`.

    :param folder, chunk: as for :class:`Smoother`.
    """

    def __init__(self, design: UnitDesign, folder: Path | None = None, chunk: int = CHUNK) -> None:
        self._design = design
        self._waited: list[NDArray[np.int64]] = []
        self._smoother = Smoother(design, folder, chunk)

    def __enter__(self) -> SmoothedRun:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._smoother.__exit__(kind, error, trace)

    def keeping(self, stretches: Iterable[Stretch]) -> Iterator[Stretch]:
        """The same stretches; what their cycles saw is kept on the way."""
        for stretch in stretches:
            if stretch.results.first < 0:
                self._waited.append(stretch.readings.times)
            else:
                self._smoother.keep(stretch.readings)
            yield stretch

    def cycles(self, running: Replay) -> Iterator[SmoothedCycles]:
        """All cycles of a replay that has ended, in order of time.

        :raises UnsoundArithmetic: a variance is not positive.
        :raises ReplayError: the temporary file cannot be written.
        """
        for times in self._waited:
            nothing = np.full((len(times), len(self._design.model.spec.estimates)), np.nan)
            yield SmoothedCycles(times, nothing, nothing)
        before = start(self._design, running.first_cycle).estimator
        book, late = running.run.state.book, tuple(running.late)
        yield from self._smoother.cycles(Known(before, running.first_cycle, running.counted_labs, book, late))


def _cycle_of(lab: LabAtCycle) -> int:
    return lab.cycle


class _Interval:
    """What holds for all cycles kept."""

    def __init__(self, design: UnitDesign, known: Known) -> None:
        self.design = design
        self.known = known
        there = [item for item in known.late if len(item.times)]
        self._late = np.empty(len(there), dtype=object)
        self._late[:] = there
        self._begins = np.array([item.times[0] for item in there], dtype=np.int64)
        self._ends = np.array([item.times[-1] for item in there], dtype=np.int64)

    def late_of(self, part: CycleReadings) -> Iterator[LateReadings]:
        """Late readings that may belong to a chunk, in the order in which they were learnt."""
        yield from self._late[(self._begins <= part.times[-1]) & (self._ends >= part.times[0])]

    def readings(self, row: int, part: CycleReadings) -> ScalarReadings:
        """The readings of a chunk that begins ``row`` cycles after the first, as the filter takes them."""
        begin, labs = self.known.first + row, self.known.labs
        low = bisect_left(labs, begin, key=_cycle_of)
        labs = labs[low : bisect_left(labs, begin + len(part), key=_cycle_of)]
        data = block_inputs(self.design, self.known.book, begin, part, labs)
        at, sensor = np.nonzero((data.use != 0) & np.isfinite(data.y))
        order = np.argsort(np.concatenate([at, data.lab_at]), kind="stable")

        def in_order(of_sensors: NDArray[Any], of_labs: NDArray[Any]) -> NDArray[Any]:
            return np.ascontiguousarray(np.concatenate([of_sensors, of_labs])[order])

        return ScalarReadings(
            data.u,
            in_order(at.astype(np.int64), data.lab_at),
            in_order(sensor.astype(np.int64), data.lab_row),
            in_order(data.y[at, sensor], data.lab_value),
            in_order(self.design.kernel.r[sensor] * data.scale[at, sensor], data.lab_variance),
        )

    def forward(self, estimator: EstimatorState, data: ScalarReadings, row: int) -> Trace:
        """Run a chunk; ``estimator`` is advanced in place."""
        trace = empty_trace(len(data.u), len(data.at), self.design.kernel)
        if not run_forward(private(self.design.kernel), estimator, data, trace):
            raise self.unsound(row)
        return trace

    def unsound(self, row: int) -> UnsoundArithmetic:
        """What is raised where a variance is not positive."""
        near = self.known.first + row
        return UnsoundArithmetic(
            f"{self.design.model.spec.name}: a smoothed variance is not positive near cycle {near}"
        )
