"""A unit's model laid out for the compiled loop: flat arrays, known structure used, nothing computed twice.

Input-driven paths are deterministic and stay out of the covariance; their dead times are a ring buffer of past inputs.
The stochastic part keeps A and C in compressed rows, so that shift registers and offsets cost what they move.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from plant_models.plant_model import DiscretePath, Matrix, PlantModel
from softsensor.estimation.eight_states import EightStates, eight_states
from softsensor.estimation.schedule_tables import Mask, Schedules, schedule_tables, scheduled_entries

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


CHUNK = 64
"""Cycles between two states that the loop keeps."""


class Kernel(NamedTuple):
    """Everything that the compiled cycle reads; rows are sensors first, then estimates."""

    n_inputs: int
    n_sensors: int
    n_estimates: int
    ring: int
    """Length of the ring buffer of past inputs: the longest dead time in samples, plus two."""
    operating_u: Floats
    operating_y: Floats
    """(n_sensors + n_estimates,)"""
    block_source: Ints
    block_row: Ints
    block_size: Ints
    block_state: Ints
    """First state of each path among the input-driven states."""
    block_phi: Ints
    """Offset of each path's phi, row by row, in ``phi``."""
    block_whole: Ints
    block_older: Ints
    """1 where the direct term acts on the older of the two inputs of a fractional dead time."""
    block_d: Floats
    phi: Floats
    gamma_recent: Floats
    gamma_older: Floats
    c_in: Floats
    steady: Floats
    a_ptr: Ints
    a_idx: Ints
    a_val: Floats
    c_ptr: Ints
    c_idx: Ints
    c_val: Floats
    q: Floats
    r: Floats
    """Variance of each sensor's noise (n_sensors,)."""
    gate: Floats
    """Standard deviations of each sensor's innovation beyond which a single reading is not used (n_sensors,)."""
    moved_start: Ints
    moved_stop: Ints
    moved_from: Ints
    """Runs of rows of A that only move states: state i becomes state i + moved_from (-1 in a shift register, 0 in an
    offset) for moved_start <= i < moved_stop."""
    span_start: Ints
    span_stop: Ints
    span_from: Ints
    """The same runs as spans of columns, joined across mixed ones where they move alike: longer copies."""
    mixed: Ints
    """The other rows of A, ascending."""
    mixed_from: Ints
    """States that these have entries for, ascending."""
    schedules: Schedules
    """Paths that change with an input; the arrays above hold them as they are at the operating point."""
    eight: EightStates
    """The stochastic part written out, where it is small."""


class EstimatorState(NamedTuple):
    """What the estimator carries from cycle to cycle: the prediction for the coming cycle.

    x (n,), P (n, n): mean and covariance of the stochastic part; x_in: input-driven states; u_past (n_inputs, ring):
    past inputs as deviations; head (1,): column of the newest of them, -1 before the first cycle; streak (n_sensors,):
    readings in a row far to one side, negative where they lie below (:mod:`softsensor.estimation.gate`).
    """

    x: Floats
    P: Floats
    x_in: Floats
    u_past: Floats
    head: Ints
    streak: Ints

    def copy(self) -> EstimatorState:
        """A copy that shares nothing with this state."""
        return EstimatorState(
            self.x.copy(),
            self.P.copy(),
            self.x_in.copy(),
            self.u_past.copy(),
            self.head.copy(),
            self.streak.copy(),
        )


def empty_states(like: EstimatorState, count: int) -> EstimatorState:
    """Room for ``count`` states, stacked: each array with one axis more, the first."""
    return EstimatorState(*(np.empty((count, *part.shape), dtype=part.dtype) for part in like))


def state_of(stacked: EstimatorState, place: int) -> EstimatorState:
    """One of some stacked states; it shares their memory."""
    return EstimatorState(*(part[place] for part in stacked))


def compressed_rows(matrix: Matrix, keep: Mask | None = None) -> tuple[Ints, Ints, Floats]:
    """Row pointers, column indices and values of the entries that are not zero, and of those to ``keep`` anyway.

    >>> [part.tolist() for part in compressed_rows(np.array([[0.0, 2.0], [0.0, 0.0]]))]
    [[0, 1, 1], [1], [2.0]]
    """
    rows, columns = np.nonzero(matrix if keep is None else (matrix != 0.0) | keep)
    pointers = np.searchsorted(rows, np.arange(matrix.shape[0] + 1)).astype(np.int64)
    return pointers, columns.astype(np.int64), np.ascontiguousarray(matrix[rows, columns])


def moved_rows(A: Matrix) -> tuple[Ints, Ints, Ints, Ints, Ints, Ints, Ints]:
    """Runs of consecutive rows with a single entry of exactly 1 on one diagonal (start, stop, diagonal); neighbouring
    runs of one diagonal joined to spans, likewise; the other rows.

    >>> [part.tolist() for part in moved_rows(np.array([[0.9, 0.0, 0.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0]]))]
    [[1], [3], [-1], [1], [3], [-1], [0]]
    """
    runs: list[list[int]] = []
    mixed: list[int] = []
    for i, row in enumerate(A):
        entries = np.flatnonzero(row)
        if entries.size != 1 or row[entries[0]] != 1.0:
            mixed.append(i)
            continue
        offset = int(entries[0]) - i
        if runs and runs[-1][1:] == [i, offset]:
            runs[-1][1] = i + 1
        else:
            runs.append([i, i + 1, offset])
    spans: list[list[int]] = []
    for start, stop, offset in runs:
        if spans and spans[-1][2] == offset:
            spans[-1][1] = stop
        else:
            spans.append([start, stop, offset])
    return (*_columns(runs), *_columns(spans), np.array(mixed, dtype=np.int64))


def _columns(rows: list[list[int]]) -> tuple[Ints, Ints, Ints]:
    first, second, third = np.array(rows, dtype=np.int64).reshape(-1, 3).T.copy()
    return first, second, third


def _flat(parts: list[Floats]) -> Floats:
    return np.ascontiguousarray(np.concatenate([part.ravel() for part in parts])) if parts else np.zeros(0)


def _offsets(sizes: list[int]) -> Ints:
    return np.concatenate(([0], np.cumsum(sizes)[:-1])).astype(np.int64) if sizes else np.zeros(0, np.int64)


def _ring_length(paths: tuple[DiscretePath, ...]) -> int:
    return max((path.whole_delays for path in paths), default=0) + 2


def build_kernel(model: PlantModel) -> Kernel:
    """Lay a model out for the compiled loop."""
    spec, paths, part = model.scaled, model.paths, model.stochastic
    sizes = [len(path.steady) for path in paths]
    entries = scheduled_entries(model)
    compressed_C = compressed_rows(part.C, entries.C)
    moved = moved_rows(np.where(entries.A, 0.5, part.A))
    operating = [item.operating_point for item in spec.sensors]
    operating += [item.operating_point for item in spec.estimates]

    def ints(values: list[int]) -> Ints:
        return np.array(values, dtype=np.int64)

    return Kernel(
        len(spec.inputs),
        len(spec.sensors),
        len(spec.estimates),
        _ring_length(paths),
        np.array([item.operating_point for item in spec.inputs], dtype=np.float64),
        np.array(operating, dtype=np.float64),
        ints([path.source for path in paths]),
        ints([path.row for path in paths]),
        ints(sizes),
        _offsets(sizes),
        _offsets([size * size for size in sizes]),
        ints([path.whole_delays for path in paths]),
        ints([int(path.fraction > 0.0) for path in paths]),
        np.array([path.d for path in paths], dtype=np.float64),
        _flat([path.phi for path in paths]),
        _flat([path.gamma_recent for path in paths]),
        _flat([path.gamma_older for path in paths]),
        _flat([path.c for path in paths]),
        _flat([path.steady for path in paths]),
        *compressed_rows(part.A, entries.A),
        *compressed_C,
        np.array(part.q, dtype=np.float64),
        np.array([item.noise_sd**2 for item in spec.sensors], dtype=np.float64),
        np.array([item.gate for item in spec.sensors], dtype=np.float64),
        *moved,
        np.flatnonzero(((part.A != 0.0) | entries.A)[moved[-1]].any(axis=0)).astype(np.int64),
        schedule_tables(model, compressed_C[0], compressed_C[1]),
        eight_states(part.A, part.C, part.q, scheduled=bool(entries.A.any() or entries.C.any())),
    )


def initial_state(model: PlantModel, kernel: Kernel) -> EstimatorState:
    """The state before the first cycle; input-driven states are set in steady state by the first cycle's inputs."""
    n = len(kernel.q)
    return EstimatorState(
        np.zeros(n),
        np.array(model.stochastic.P0, dtype=np.float64, order="C"),
        np.zeros(len(kernel.steady)),
        np.zeros((kernel.n_inputs, kernel.ring)),
        np.array([-1], dtype=np.int64),
        np.zeros(kernel.n_sensors, dtype=np.int64),
    )
