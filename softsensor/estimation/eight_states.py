"""The Kalman recursion for up to eight states without structure to use: every row has room for eight, the rest is zero.

The operations are those of :mod:`softsensor.estimation.kalman` in the same order, so the bits are the same; entries of A
and C that are zero only add zeros. With eight columns written out the compiler keeps a row of P in registers and works on
four columns at a time; with a number of columns that it does not know it takes three to five times as long. Not for models
with schedules, whose A and C change from cycle to cycle.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from softsensor.estimation.compiling import inlined

Floats = NDArray[np.float64]
EIGHT = 8


class EightStates(NamedTuple):
    """A (8, 8), A' (8, 8), C (rows, 8) and q (8,), written out; all of length 0 for a model that is not for this."""

    A: Floats
    At: Floats
    C: Floats
    q: Floats


def eight_states(A: Floats, C: Floats, q: Floats, scheduled: bool) -> EightStates:
    """A model, A (n, n), C (rows, n), q (n,), for the recursion for eight states; of length 0 where it has more states, or
    schedules.

    >>> eight_states(np.array([[0.9]]), np.array([[2.0]]), np.array([0.1]), scheduled=False).C.tolist()
    [[2.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0]]
    """
    n, rows = len(q), len(C)
    if n > EIGHT or scheduled:
        return EightStates(np.zeros((0, 0)), np.zeros((0, 0)), np.zeros((0, 0)), np.zeros(0))
    wide = np.zeros((EIGHT, EIGHT)), np.zeros((rows, EIGHT)), np.zeros(EIGHT)
    wide[0][:n, :n], wide[1][:, :n], wide[2][:n] = A, C, q
    return EightStates(wide[0], np.ascontiguousarray(wide[0].T), wide[1], wide[2])


@inlined
def combine(a: Floats, P: Floats, out: Floats) -> None:
    """out (8,) = a P for a (8,), P (8, 8)."""
    one, two, three, four, five, six, seven, eight = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for e in range(EIGHT):
        value, row = a[e], P[e]
        one += value * row[0]
        two += value * row[1]
        three += value * row[2]
        four += value * row[3]
        five += value * row[4]
        six += value * row[5]
        seven += value * row[6]
        eight += value * row[7]
    out[0], out[1], out[2], out[3] = one, two, three, four
    out[4], out[5], out[6], out[7] = five, six, seven, eight


@inlined
def dot(a: Floats, b: Floats) -> float:
    """a b for a, b (8,)."""
    total = 0.0
    for e in range(EIGHT):
        total += a[e] * b[e]
    return total


@inlined
def _divided(v: Floats, by: float, out: Floats) -> None:
    out[0], out[1], out[2], out[3] = v[0] / by, v[1] / by, v[2] / by, v[3] / by
    out[4], out[5], out[6], out[7] = v[4] / by, v[5] / by, v[6] / by, v[7] / by


@inlined
def _less_square(P: Floats, w: Floats) -> None:
    """P - w w'."""
    one, two, three, four, five, six, seven, eight = w[0], w[1], w[2], w[3], w[4], w[5], w[6], w[7]
    for i in range(EIGHT):
        row, a = P[i], w[i]
        row[0] -= a * one
        row[1] -= a * two
        row[2] -= a * three
        row[3] -= a * four
        row[4] -= a * five
        row[5] -= a * six
        row[6] -= a * seven
        row[7] -= a * eight


@inlined
def correct_eight(x: Floats, P: Floats, innovation: float, s: float, v: Floats, K: Floats) -> None:
    """As :func:`softsensor.estimation.kalman.correct`, from the innovation, its variance ``s`` and ``v`` = P c'."""
    _divided(v, np.sqrt(s), K)
    _less_square(P, K)
    _divided(v, s, K)
    for i in range(EIGHT):
        x[i] += K[i] * innovation


@inlined
def predict_eight(model: EightStates, x: Floats, P: Floats, v: Floats, AP: Floats, M: Floats) -> None:
    """As :func:`softsensor.estimation.kalman.predict_into`, with ``v`` (8,) and ``AP`` (8, 8) as work space."""
    for i in range(EIGHT):
        v[i] = dot(model.A[i], x)
    for i in range(EIGHT):
        x[i] = v[i]
    for i in range(EIGHT):
        combine(model.A[i], P, AP[i])
    for i in range(EIGHT):
        combine(AP[i], model.At, M[i])
    for i in range(EIGHT):
        for k in range(i + 1, EIGHT):
            M[k, i] = M[i, k]
        M[i, i] += model.q[i]
