"""Autocovariance least squares: noise variances from the autocovariances of a filter's innovations.

Odelson, Rajamani & Rawlings, Automatica 42 (2006) 303-308. A filter with any stabilising predictor gain L leaves
innovations whose autocovariances are linear in the variances that are wanted. With the error
eps(k+1) = Abar eps(k) + G w - L v, Abar = A - L C, e = C eps + v::

    P   = Abar P Abar' + G Q G' + L R L'
    C_0 = C P C' + R,      C_j = C Abar^j P C' - C Abar^{j-1} L R,   j > 0

so that variances not below zero are found by least squares over the lags. It is a start for the likelihood, which uses
the readings better and finds time constants too.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit
from scipy.linalg import solve_discrete_lyapunov
from scipy.optimize import nnls

from softsensor.estimation.kernel import Floats


class NoisySystem(NamedTuple):
    """x(k+1) = A x + G w, y = C x + v: A (n, n), G (n, g), C (m, n); w and v independent, their variances wanted."""

    A: Floats
    G: Floats
    C: Floats


class Variances(NamedTuple):
    """Variances of w (g,) and v (m,), and the condition number of the least squares."""

    process: Floats
    measurement: Floats
    condition: float


def autocovariances(e: Floats, lags: int) -> Floats:
    """Mean of e(k+j) e(k)' over all pairs present, j = 0 .. lags-1: (lags, m, m) of innovations e (N, m) with nan."""
    present = np.isfinite(e)
    filled = np.where(present, e, 0.0)
    out = np.zeros((lags, e.shape[1], e.shape[1]))
    for j in range(lags):
        later, earlier = slice(j, None), slice(None, len(e) - j)
        pairs = present[later].astype(float).T @ present[earlier].astype(float)
        out[j] = filled[later].T @ filled[earlier] / np.maximum(pairs, 1.0)
    return out


@njit(cache=True)
def innovations_of_gain(A: Floats, C: Floats, L: Floats, z: Floats) -> Floats:
    """Innovations e = z - C x, x+ = A x + L e of a fixed gain (N, m); a reading that is missing (nan) moves nothing."""
    n, m = L.shape
    out = np.empty_like(z)
    x, following = np.zeros(n), np.zeros(n)
    for k in range(z.shape[0]):
        for i in range(m):
            out[k, i] = z[k, i]
            for s in range(n):
                out[k, i] -= C[i, s] * x[s]
        for s in range(n):
            total = 0.0
            for t in range(n):
                total += A[s, t] * x[t]
            for i in range(m):
                if out[k, i] == out[k, i]:
                    total += L[s, i] * out[k, i]
            following[s] = total
        for s in range(n):
            x[s] = following[s]
    return out


def _expected(system: NoisySystem, L: Floats, lags: int, w: Floats, v: Floats) -> Floats:
    """The autocovariances (lags, m, m) that variances w (g,) and v (m,) lead to."""
    A, G, C = system
    closed = A - L @ C
    P = solve_discrete_lyapunov(closed, (G * w) @ G.T + (L * v) @ L.T)
    out = np.zeros((lags, C.shape[0], C.shape[0]))
    out[0] = C @ P @ C.T + np.diag(v)
    power = np.eye(A.shape[0])
    for j in range(1, lags):
        out[j] = C @ (closed @ power) @ P @ C.T - (C @ power @ L) * v
        power = closed @ power
    return out


def autocovariance_least_squares(system: NoisySystem, L: Floats, e: Floats, lags: int = 15) -> Variances:
    """Variances of w and v, not below zero, from innovations ``e`` (N, m) of the predictor gain ``L`` (n, m).

    :raises ValueError: A - L C is not stable, so that there are no autocovariances.
    """
    if np.abs(np.linalg.eigvals(system.A - L @ system.C)).max() >= 1.0 - 1e-9:
        raise ValueError("the filter of this gain does not settle")
    g, m = system.G.shape[1], system.C.shape[0]
    unit = np.eye(g + m)
    columns = [_expected(system, L, lags, one[:g], one[g:]).ravel() for one in unit]
    matrix, found = np.column_stack(columns), autocovariances(e, lags).ravel()
    size = np.linalg.norm(matrix, axis=0)
    if not np.all(size > 0.0):
        return Variances(np.full(g, np.nan), np.full(m, np.nan), np.inf)
    solution = nnls(matrix / size, found)[0] / size
    return Variances(solution[:g], solution[g:], float(np.linalg.cond(matrix / size)))
