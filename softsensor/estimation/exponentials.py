"""e^{M t} of a small lower triangular matrix, compiled, from +, -, *, / alone: what it gives reaches the digest.

Scaling by a power of two until the norm is at most one half, a Taylor series, squaring. The diagonal is put in from
scalar exponentials after each squaring, so that slow and fast lags in one cascade keep their own accuracy (the idea of
Al-Mohy & Higham, SIAM J. Matrix Anal. Appl. 31 (2009) 970, from memory; checked against scipy in the tests).
"""

from __future__ import annotations

import math

from softsensor.estimation.compiling import uncounted
from softsensor.estimation.elementary import exponential
from softsensor.estimation.kernel import Floats

TERMS = 16
"""Of the series: at norm one half what is left out is below 1e-19."""
LARGEST_NORM = 0.5


@uncounted
def exponentiate(M: Floats, n: int, t: float, E: Floats, other: Floats) -> None:
    """E = e^{M t} of the leading (n, n) part of ``M``, lower triangular; ``other`` is work space of that size."""
    halvings = _halvings(M, n, t)
    step = math.ldexp(t, -halvings)
    for i in range(n):
        for j in range(n):
            E[i, j] = 1.0 if i == j else 0.0
    for term in range(TERMS, 0, -1):
        multiply(M, E, n, other)
        for i in range(n):
            for j in range(i + 1):
                E[i, j] = (1.0 if i == j else 0.0) + other[i, j] * (step / term)
    _diagonal(M, n, step, E)
    for _ in range(halvings):
        step *= 2.0
        multiply(E, E, n, other)
        for i in range(n):
            for j in range(i + 1):
                E[i, j] = other[i, j]
        _diagonal(M, n, step, E)


@uncounted
def multiply(left: Floats, right: Floats, n: int, out: Floats) -> None:
    """out = left right, the leading (n, n) parts, all lower triangular; ``out`` is neither of them."""
    for i in range(n):
        for j in range(n):
            total = 0.0
            for k in range(j, i + 1):
                total += left[i, k] * right[k, j]
            out[i, j] = total


@uncounted
def _halvings(M: Floats, n: int, t: float) -> int:
    """How often M t must be halved for its largest row sum to be at most LARGEST_NORM."""
    largest = 0.0
    for i in range(n):
        total = 0.0
        for j in range(i + 1):
            total += abs(M[i, j])
        largest = max(largest, total * t)
    count = 0
    while largest > LARGEST_NORM:
        largest *= 0.5
        count += 1
    return count


@uncounted
def _diagonal(M: Floats, n: int, t: float, E: Floats) -> None:
    for i in range(n):
        E[i, i] = exponential(M[i, i] * t)
