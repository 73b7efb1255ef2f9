"""The arrays that the compiled loop reads and fills."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from softsensor.estimation.eight_states import EIGHT
from softsensor.estimation.kernel import Floats, Ints, Kernel
from softsensor.estimation.pending import Pending

Marks = NDArray[np.int8]


class BlockInputs(NamedTuple):
    """N cycles as the loop takes them.

    u (N, n_inputs) finite; y (N, n_sensors), nan where missing; raw (N, n_sensors): the same as read, and slope (N or 1,
    n_sensors): how fast y moves with it, for the test of stuck readings; scale (N, n_sensors): factor on the noise variance;
    use (N, n_sensors): 0 keeps a reading from the estimate; fresh (n_sensors,), doubtful and quiet (N,): see
    :func:`test_cycle`;
    lab_at: cycle within the block, ascending; lab_row: output row; lab_value in engineering units; lab_variance.
    """

    u: Floats
    y: Floats
    raw: Floats
    slope: Floats
    scale: Floats
    use: Marks
    fresh: Ints
    doubtful: Marks
    quiet: Marks
    lab_at: Ints
    lab_row: Ints
    lab_value: Floats
    lab_variance: Floats


class BlockOutputs(NamedTuple):
    """What the loop fills: (N, n_sensors) each, estimates (N, n_estimates), one entry per laboratory result."""

    predicted: Floats
    innovation: Floats
    innovation_sd: Floats
    high: Floats
    low: Floats
    estimate: Floats
    estimate_sd: Floats
    used: Marks
    """(N, n_sensors) 1 where a reading has corrected the estimate: there, in use, and let through by the gate."""
    events: Ints
    settling: Marks
    """(N,) 1 while the tests rest because inputs are or were missing."""
    news: Ints
    """(N,) Union of all news of a cycle."""
    beyond: Floats
    """(N, n_sensors) Probability of a bias beyond the tolerance."""
    squares: Floats
    """(N,) Sum of squares of the whitened innovations; a sensor without a reading in use counts as its expectation, 1."""
    lab_predicted: Floats
    lab_sd: Floats


def empty_outputs(cycles: int, kernel: Kernel, labs: int) -> BlockOutputs:
    """Arrays for the results of ``cycles`` cycles; zero what is left alone while the tests are off."""
    sensors, estimates = (cycles, kernel.n_sensors), (cycles, kernel.n_estimates)
    return BlockOutputs(
        np.empty(sensors),
        np.empty(sensors),
        np.empty(sensors),
        np.zeros(sensors),
        np.zeros(sensors),
        np.empty(estimates),
        np.empty(estimates),
        np.empty(sensors, dtype=np.int8),
        np.zeros(sensors, dtype=np.int64),
        np.zeros(cycles, dtype=np.int8),
        np.zeros(cycles, dtype=np.int64),
        np.zeros(sensors),
        np.empty(cycles),
        np.empty(labs),
        np.empty(labs),
    )


def rows_of_inputs(data: BlockInputs, start: int, stop: int) -> BlockInputs:
    """Cycles start to stop of some; laboratory results are left as they are."""
    slope = data.slope if len(data.slope) == 1 else data.slope[start:stop]
    whole = data._replace(slope=slope)
    return whole._replace(**{name: getattr(data, name)[start:stop] for name in _BY_CYCLE})


def rows_of_outputs(out: BlockOutputs, start: int, stop: int, labs: int) -> BlockOutputs:
    """Cycles start to stop of some, with room for so many laboratory results."""
    by_cycle = {name: getattr(out, name)[start:stop] for name in out._fields[:-2]}
    return out._replace(**by_cycle, lab_predicted=np.empty(labs), lab_sd=np.empty(labs))


_BY_CYCLE = ("u", "y", "raw", "scale", "use", "doubtful", "quiet")


class WorkSpace(NamedTuple):
    """Arrays that the loop works in, w states wide: those of the model, or eight.

    x (w,), P (w, w) of the cycle and ``other`` of the next one; v, K (w,); pending: corrections not yet taken off P;
    base (rows,), rows = n_sensors + n_estimates; paths; moves (n_inputs,); kept_out (n_sensors,); and for eight states
    AP (8, 8), Pc (rows, 8) and CPC (rows,): P C' and C P C' of each output before the cycle's corrections.
    """

    x: Floats
    P: Floats
    other: Floats
    v: Floats
    K: Floats
    base: Floats
    paths: Floats
    moves: Floats
    kept_out: Ints
    pending: Pending
    AP: Floats
    Pc: Floats
    CPC: Floats


def work_space(kernel: Kernel, lab_at: Ints) -> WorkSpace:
    """Room for the loop, as wide as it is to run; ``lab_at``: cycles of laboratory results.

    Up to eight states go through :mod:`softsensor.estimation.eight_states`, more, and all with schedules, through
    :mod:`softsensor.estimation.pending`: ``kernel.eight`` says it.
    """
    rows = kernel.n_sensors + kernel.n_estimates
    width = EIGHT if len(kernel.eight.q) else len(kernel.q)
    most = kernel.n_sensors + int(np.unique(lab_at, return_counts=True)[1].max(initial=0))
    return WorkSpace(
        np.zeros(width),
        np.zeros((width, width)),
        np.zeros((width, width)),
        np.zeros(width),
        np.zeros(width),
        np.zeros(rows),
        np.zeros(len(kernel.steady) + 1),
        np.zeros(kernel.n_inputs),
        np.zeros(kernel.n_sensors, dtype=np.int64),
        Pending(np.zeros((most, width)), np.zeros(width, dtype=np.int64)),
        np.zeros((EIGHT, EIGHT)),
        np.zeros((rows, EIGHT)),
        np.zeros(rows),
    )
