"""The Kalman recursion of the stochastic part, compiled, one scalar reading at a time, in a fixed order.

Covariances are updated in Joseph's form and kept exactly symmetric by writing one triangle and mirroring it. No BLAS
and no fastmath: the same bits on every machine. Source of the recursion: Anderson & Moore, Optimal Filtering (1979),
ch. 3 and 6 (sequential processing of readings with uncorrelated noise); checked against a dense filter in the tests.
"""

from __future__ import annotations

from numba import njit

from softsensor.estimation.kernel import Floats, Kernel

ROUNDING = 1e-12
"""What rounding alone may leave of a variance that is zero, as a share of the largest state's variance."""


@njit(cache=True)
def row_mean(kernel: Kernel, x: Floats, row: int) -> float:
    """C_row x."""
    total = 0.0
    for e in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
        total += kernel.c_val[e] * x[kernel.c_idx[e]]
    return total


@njit(cache=True)
def row_covariance(kernel: Kernel, P: Floats, row: int, v: Floats) -> float:
    """v = P C_row' into ``v``; returns C_row P C_row'."""
    n = len(kernel.q)
    for i in range(n):
        v[i] = 0.0
    for e in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
        j, value = kernel.c_idx[e], kernel.c_val[e]
        for i in range(n):
            v[i] += P[j, i] * value
    total = 0.0
    for e in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
        total += kernel.c_val[e] * v[kernel.c_idx[e]]
    return total


@njit(cache=True)
def output_variance(kernel: Kernel, P: Floats, row: int, v: Floats) -> float:
    """C_row P C_row' of an output without noise; 0 where a true zero has come out below zero by rounding alone.

    Behind a washout the terms cancel exactly in theory and to a few bits in floating point. What lies further below
    zero than rounding explains is returned as it is, for the caller to refuse.
    """
    variance = row_covariance(kernel, P, row, v)
    if variance >= 0.0:
        return variance
    weight, largest = 0.0, 0.0
    for e in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
        weight += abs(kernel.c_val[e])
    for i in range(len(kernel.q)):
        largest = max(largest, P[i, i])
    return 0.0 if variance >= -ROUNDING * weight * weight * largest else variance


@njit(cache=True)
def correct(
    kernel: Kernel, x: Floats, P: Floats, row: int, deviation: float, r: float, v: Floats, K: Floats
) -> bool:
    """One scalar correction with the reading ``deviation`` (from the input-driven part) of variance ``r``.

    K = v / s, v = P c', s = c P c' + r;  P+ = (I - K c) P (I - K c)' + K r K'.  False where s is not positive.
    """
    n = len(kernel.q)
    without_noise = row_covariance(kernel, P, row, v)
    s = without_noise + r
    if not s > 0.0:
        return False
    innovation = deviation - row_mean(kernel, x, row)
    for i in range(n):
        K[i] = v[i] / s
    for i in range(n):
        x[i] += K[i] * innovation
        rest = r * K[i] - (v[i] - K[i] * without_noise)
        for j in range(i, n):
            P[i, j] = P[i, j] - K[i] * v[j] + rest * K[j]
            P[j, i] = P[i, j]
    return True


@njit(cache=True)
def predict(kernel: Kernel, x: Floats, P: Floats, v: Floats, M: Floats) -> None:
    """x = A x, P = A P A' + diag(q), with A in compressed rows."""
    n = len(kernel.q)
    for i in range(n):
        total = 0.0
        for k in range(n):
            M[i, k] = 0.0
        for e in range(kernel.a_ptr[i], kernel.a_ptr[i + 1]):
            j, value = kernel.a_idx[e], kernel.a_val[e]
            total += value * x[j]
            for k in range(n):
                M[i, k] += value * P[j, k]
        v[i] = total
    for i in range(n):
        x[i] = v[i]
        for k in range(i, n):
            total = 0.0
            for e in range(kernel.a_ptr[k], kernel.a_ptr[k + 1]):
                total += M[i, kernel.a_idx[e]] * kernel.a_val[e]
            P[i, k] = total
            P[k, i] = total
        P[i, i] += kernel.q[i]
