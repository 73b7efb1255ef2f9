"""The corrections of one cycle taken off P row by row, where a row is asked for, and all the rest in the prediction.

Each scalar correction of a cycle is P - w w' (:mod:`softsensor.estimation.kalman`). Between two of them only the rows of
P are read in which the next reading's row of C has entries: those are brought up to date, in place, and the others wait.
A prediction that only moves states takes off all that waits while it moves them. Each entry sees the same subtractions in
the same order as if every correction had gone over the whole matrix at once, so the bits are the same; a large P is gone
over once a cycle and not once a reading.

While corrections wait P is not symmetric: a row that is up to date is right, a column is not.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from softsensor.estimation.compiling import inlined, inner
from softsensor.estimation.kalman import mix, predict_mean, row_covariance
from softsensor.estimation.kernel import Floats, Ints, Kernel

VECTORS = 16
"""Entries that the compiled loops take at a time."""


class Pending(NamedTuple):
    """The corrections of the cycle under way: w (most, n) one a row; done (n,): how many have been taken off each row
    of P."""

    w: Floats
    done: Ints


@inlined
def _take_off(w: Floats, first: int, count: int, at: tuple[int, int], out: Floats) -> None:
    """``out``, the entries from column at[1] on of row at[0], less corrections first to ``count``, in order."""
    i, start = at
    c = first
    while c + 2 <= count:
        one, two, a, b = w[c, start:], w[c + 1, start:], w[c, i], w[c + 1, i]
        for k in range(len(out)):
            out[k] = (out[k] - a * one[k]) - b * two[k]
        c += 2
    if c < count:
        one, a = w[c, start:], w[c, i]
        for k in range(len(out)):
            out[k] -= a * one[k]


@inlined
def _copy_less(w: Floats, first: int, count: int, at: tuple[int, int], before: Floats, out: Floats) -> None:
    """As :func:`_take_off`, from ``before`` into another row; three at a time, so that entries are seldom written twice."""
    i, start = at
    c = first
    if c + 3 <= count:
        one, two, three = w[c, start:], w[c + 1, start:], w[c + 2, start:]
        a, b, d = w[c, i], w[c + 1, i], w[c + 2, i]
        for k in range(len(out)):
            out[k] = ((before[k] - a * one[k]) - b * two[k]) - d * three[k]
        c += 3
    else:
        for k in range(len(out)):
            out[k] = before[k]
    _take_off(w, c, count, at, out)


@inner
def _bring_row(P: Floats, w: Floats, done: Ints, count: int, i: int) -> None:
    _take_off(w, done[i], count, (i, 0), P[i])
    done[i] = count


@inner
def bring_all(P: Floats, pending: Pending, count: int) -> None:
    """All of P up to date."""
    for i in range(len(pending.done)):
        _bring_row(P, pending.w, pending.done, count, i)


@inlined
def bring_rows(kernel: Kernel, P: Floats, pending: Pending, count: int, row: int) -> None:
    """The rows of P that an output's row of C touches, up to date with the first ``count`` corrections."""
    for e in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
        _bring_row(P, pending.w, pending.done, count, kernel.c_idx[e])


@inlined
def correct_pending(
    kernel: Kernel,
    x: Floats,
    P: Floats,
    pending: Pending,
    count: int,
    row: int,
    innovation: float,
    r: float,
    v: Floats,
) -> float:
    """As :func:`softsensor.estimation.kalman.correct`, same bits, from the innovation; P's part is correction ``count``."""
    bring_rows(kernel, P, pending, count, row)
    s = row_covariance(kernel, P, row, v) + r
    if not s > 0.0:
        return 0.0
    root, w = np.sqrt(s), pending.w[count]
    for i in range(len(v)):
        w[i] = v[i] / root
    for i in range(len(v)):
        x[i] += (v[i] / s) * innovation
    return float(s)


@inlined
def predict_pending(
    kernel: Kernel, x: Floats, P: Floats, pending: Pending, count: int, v: Floats, M: Floats
) -> None:
    """As :func:`softsensor.estimation.kalman.predict_into`, the same bits; no correction waits after it."""
    predict_mean(kernel, x, v)
    _move(kernel, P, pending, count, M)
    for s in range(len(kernel.mixed_from)):
        _bring_row(P, pending.w, pending.done, count, kernel.mixed_from[s])
    mix(kernel, P, v, M)
    for i in range(len(pending.done)):
        pending.done[i] = 0


@inner
def _move(kernel: Kernel, P: Floats, pending: Pending, count: int, M: Floats) -> None:
    """What is only moved, corrected on the way; columns in between and beyond are written over afterwards: a loop of whole
    vectors is quicker than a shorter one that ends in single entries.
    """
    for a in range(len(kernel.moved_start)):
        offset = kernel.moved_from[a]
        for b in range(len(kernel.span_start)):
            start, source = kernel.span_start[b], kernel.span_from[b]
            whole = (kernel.span_stop[b] - start + VECTORS - 1) // VECTORS * VECTORS
            stop = min(start + whole, len(P), len(P) - source)
            for i in range(kernel.moved_start[a], kernel.moved_stop[a]):
                before, first = P[i + offset, start + source :], pending.done[i + offset]
                _copy_less(pending.w, first, count, (i + offset, start + source), before, M[i, start:stop])
