"""The Kalman recursion of the stochastic part, compiled, one scalar reading at a time, in a fixed order.

Covariances are kept whole and exactly symmetric: whole rows, one after another in memory, are quicker than a triangle. A
scalar correction with its own gain needs no Joseph form: (I - K c) P (I - K c)' + K r K' and P - w w', w = P c' / sqrt(s),
are one and the same there, and round alike. No BLAS and no fastmath: the same bits on every machine. Source of the
recursion: Anderson & Moore, Optimal Filtering (1979), ch. 3 and 6 (sequential processing of readings with uncorrelated
noise); checked against a dense filter in the tests.
"""

from __future__ import annotations

import numpy as np

from softsensor.estimation.compiling import inlined, inner, uncounted
from softsensor.estimation.kernel import Floats, Ints, Kernel

ROUNDING = 1e-12
"""What rounding alone may leave of a variance that is zero, as a share of the largest state's variance."""


@uncounted
def row_mean(kernel: Kernel, x: Floats, row: int) -> float:
    """C_row x."""
    total = 0.0
    for e in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
        total += kernel.c_val[e] * x[kernel.c_idx[e]]
    return total


@inlined
def _combine_rows(P: Floats, idx: Ints, val: Floats, entries: tuple[int, int], v: Floats) -> None:
    """v = sum of val[e] P[idx[e]] over the entries, in order from zero; two at a time go over ``v`` once."""
    e, stop = entries
    if e + 2 <= stop:
        one, other, a, b = P[idx[e]], P[idx[e + 1]], val[e], val[e + 1]
        for k in range(len(v)):
            v[k] = (0.0 + a * one[k]) + b * other[k]
        e += 2
    else:
        for k in range(len(v)):
            v[k] = 0.0
    while e < stop:
        one, a = P[idx[e]], val[e]
        for k in range(len(v)):
            v[k] += a * one[k]
        e += 1


@inner
def row_covariance(kernel: Kernel, P: Floats, row: int, v: Floats) -> float:
    """v = P C_row' into ``v``; returns C_row P C_row'."""
    first, stop, total = kernel.c_ptr[row], kernel.c_ptr[row + 1], 0.0
    _combine_rows(P, kernel.c_idx, kernel.c_val, (first, stop), v)
    for e in range(first, stop):
        total += kernel.c_val[e] * v[kernel.c_idx[e]]
    return total


@inner
def row_variance(kernel: Kernel, P: Floats, row: int) -> float:
    """C_row P C_row' alone, the same bits as from :func:`row_covariance`."""
    first, stop, total = kernel.c_ptr[row], kernel.c_ptr[row + 1], 0.0
    for e in range(first, stop):
        covariance, of_entry = 0.0, P[kernel.c_idx[e]]
        for f in range(first, stop):
            covariance += kernel.c_val[f] * of_entry[kernel.c_idx[f]]
        total += kernel.c_val[e] * covariance
    return total


@inner
def unless_rounding(kernel: Kernel, P: Floats, row: int, variance: float) -> float:
    """The variance of an output without noise; 0 where a true zero has come out below zero by rounding alone.

    Behind a washout the terms cancel exactly in theory and to a few bits in floating point. What lies further below
    zero than rounding explains is returned as it is, for the caller to refuse.
    """
    if variance >= 0.0:
        return variance
    weight, largest = 0.0, 0.0
    for e in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
        weight += abs(kernel.c_val[e])
    for i in range(len(kernel.q)):
        largest = max(largest, P[i, i])
    return 0.0 if variance >= -ROUNDING * weight * weight * largest else variance


@inner
def output_variance(kernel: Kernel, P: Floats, row: int, v: Floats) -> float:
    """C_row P C_row' of an output without noise, and P C_row' into ``v``; a zero that rounding made negative is 0."""
    return unless_rounding(kernel, P, row, row_covariance(kernel, P, row, v))


@uncounted
def correct(
    kernel: Kernel, x: Floats, P: Floats, row: int, deviation: float, r: float, v: Floats, K: Floats
) -> float:
    """One scalar correction with the reading ``deviation`` (from the input-driven part) of variance ``r``.

    s = c P c' + r, K = P c' / s;  P+ = P - w w' with w = P c' / sqrt(s).  ``v`` is left with P c', ``K`` with the
    gain. Returns s; 0 where it is not positive.
    """
    n = len(v)
    s = row_covariance(kernel, P, row, v) + r
    if not s > 0.0:
        return 0.0
    innovation, root = deviation - row_mean(kernel, x, row), np.sqrt(s)
    for i in range(n):
        K[i] = v[i] / root
    for i in range(n):
        w, entries = K[i], P[i]
        for j in range(n):
            entries[j] -= w * K[j]
    for i in range(n):
        K[i] = v[i] / s
        x[i] += K[i] * innovation
    return float(s)


@inner
def predict_into(kernel: Kernel, x: Floats, P: Floats, v: Floats, M: Floats) -> None:
    """x = A x;  M = A P A' + diag(q), exactly symmetric, with ``v`` (n,) as work space.

    States that A only moves (shift registers, offsets) are moved: their entries of P are copied. Only the other rows
    are multiplied.
    """
    predict_mean(kernel, x, v)
    _move(kernel, P, M)
    mix(kernel, P, v, M)


@inner
def mix(kernel: Kernel, P: Floats, v: Floats, M: Floats) -> None:
    """The rows and columns of A P A' that are not only moved, and diag(q); reads the rows of P that these take in."""
    mixed = kernel.mixed
    for a in range(len(mixed)):
        i = mixed[a]
        _combine_rows(P, kernel.a_idx, kernel.a_val, (kernel.a_ptr[i], kernel.a_ptr[i + 1]), v)
        for b in range(len(kernel.moved_start)):
            start, stop = kernel.moved_start[b], kernel.moved_stop[b]
            before, row, column = v[start + kernel.moved_from[b] :], M[i, start:stop], M[start:stop, i]
            for k in range(len(row)):
                row[k] = before[k]
            for k in range(len(row)):
                column[k] = before[k]
        for b in range(a, len(mixed)):
            k, total = mixed[b], 0.0
            for e in range(kernel.a_ptr[k], kernel.a_ptr[k + 1]):
                total += v[kernel.a_idx[e]] * kernel.a_val[e]
            M[i, k] = total
            M[k, i] = total
    for i in range(len(v)):
        M[i, i] += kernel.q[i]


@inner
def _move(kernel: Kernel, P: Floats, M: Floats) -> None:
    """Copy what is only moved; columns in between are written over afterwards."""
    for a in range(len(kernel.moved_start)):
        offset = kernel.moved_from[a]
        for b in range(len(kernel.span_start)):
            start, stop = kernel.span_start[b], kernel.span_stop[b]
            for i in range(kernel.moved_start[a], kernel.moved_stop[a]):
                before, after = P[i + offset, start + kernel.span_from[b] :], M[i, start:stop]
                for k in range(len(after)):
                    after[k] = before[k]


@inner
def predict_mean(kernel: Kernel, x: Floats, v: Floats) -> None:
    """x = A x, with ``v`` (n,) as work space."""
    for i in range(len(v)):
        total = 0.0
        for e in range(kernel.a_ptr[i], kernel.a_ptr[i + 1]):
            total += kernel.a_val[e] * x[kernel.a_idx[e]]
        v[i] = total
    for i in range(len(v)):
        x[i] = v[i]


@inner
def copy_into(M: Floats, P: Floats) -> None:
    """P = M, entry by entry, as far as both reach."""
    for i in range(min(M.shape[0], P.shape[0])):
        for j in range(min(M.shape[1], P.shape[1])):
            P[i, j] = M[i, j]


@uncounted
def predict(kernel: Kernel, x: Floats, P: Floats, v: Floats, M: Floats) -> None:
    """As :func:`predict_into`, in place, with ``v`` (n,) and ``M`` (n, n) as work space."""
    predict_into(kernel, x, P, v, M)
    copy_into(M, P)
