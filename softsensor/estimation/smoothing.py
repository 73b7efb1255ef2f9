"""The fixed-interval smoother, compiled: every cycle's estimate given all readings of an interval.

Forward runs the filter and writes down what each scalar correction did; backward carries an adjoint r and its
information N from the last cycle to the first. With innovation e, its variance s and gain K of a reading of row c::

    r <- c' e / s + (I - K c)' r        N <- c' c / s + (I - K c)' N (I - K c)

and from a cycle to the one before it r <- A' r, N <- A' N A. With x, P the filter's mean and covariance after a
cycle's readings, and r, N from the cycles after it, the smoothed mean of an output is c x + v' r and its variance
c P c' - v' N v, v = P c'. Neither P nor A is inverted, so that shift registers, which make both singular, are exact.

Source: Bryson & Frazier (1963) in the form of de Jong, JASA 83 (1988) 1085, reading by reading as in Durbin & Koopman,
Time Series Analysis by State Space Methods (2nd ed. 2012), sec. 4.4 and 6.4 (from memory; checked against conditioning on
the joint covariance in the tests). Fixed order, no BLAS, as in :mod:`softsensor.estimation.kalman`.

The variance is a difference: its error is about 1e-14 of the variances that the filter had at that cycle. Where readings
to come reduce a variance by more than a factor of 1e6, fewer than eight digits of what is left are certain.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from softsensor.estimation.gate import gates_open, passes
from softsensor.estimation.input_driven import accept_inputs, advance_input_driven, input_driven_outputs
from softsensor.estimation.kalman import (
    ROUNDING,
    correct,
    output_variance,
    predict,
    row_mean,
    row_variance,
)
from softsensor.estimation.kernel import EstimatorState, Floats, Ints, Kernel
from softsensor.estimation.schedules import follow_schedules


@dataclass(frozen=True)
class SmoothedCycles:
    """Consecutive cycles: times (N,), estimates and sd (N, n_estimates), sd with the interval scale in it.

    Cycles before every input has had a value are nan.
    """

    times: NDArray[np.int64]
    estimate: Floats
    sd: Floats


class ScalarReadings(NamedTuple):
    """Readings and laboratory results of N cycles in the order in which the filter takes them, M in all.

    u (N, n_inputs) finite; at (M,): cycle within the block, ascending; row (M,): output row; value (M,) in engineering
    units; variance (M,) of its noise, positive.
    """

    u: Floats
    at: Ints
    row: Ints
    value: Floats
    variance: Floats


class Trace(NamedTuple):
    """What the filter did in N cycles: gain (M, n), innovation (M,) and s (M,) of each scalar correction (gain 0 and s
    infinite where the gate let the reading not through: one that says nothing); of each
    estimate after its cycle's corrections the mean and variance (N, n_estimates), cross = P c' (N, n_estimates, n) and
    what rounding alone may make of a variance that is zero (N, n_estimates).
    """

    gain: Floats
    innovation: Floats
    s: Floats
    mean: Floats
    variance: Floats
    cross: Floats
    rounding: Floats


class Adjoint(NamedTuple):
    """What a cycle's readings and all later ones say of the prediction for it: r (n,) and N (n, n), zero after the last."""

    r: Floats
    N: Floats


def empty_trace(cycles: int, readings: int, kernel: Kernel) -> Trace:
    """Arrays for the trace of ``cycles`` cycles with ``readings`` scalar corrections."""
    n, estimates = len(kernel.q), (cycles, kernel.n_estimates)
    return Trace(
        np.zeros((readings, n)),
        np.zeros(readings),
        np.ones(readings),
        np.zeros(estimates),
        np.zeros(estimates),
        np.zeros((*estimates, n)),
        np.zeros(estimates),
    )


def last_adjoint(kernel: Kernel) -> Adjoint:
    """After the last cycle nothing more is known."""
    n = len(kernel.q)
    return Adjoint(np.zeros(n), np.zeros((n, n)))


@njit(cache=True)
def _note_estimates(
    kernel: Kernel, est: EstimatorState, base: Floats, k: int, trace: Trace, v: Floats
) -> bool:
    largest = 0.0
    for i in range(len(kernel.q)):
        largest = max(largest, est.P[i, i])
    for e in range(kernel.n_estimates):
        row = kernel.n_sensors + e
        variance = output_variance(kernel, est.P, row, v)
        if not variance >= 0.0:
            return False
        weight = 0.0
        for a in range(kernel.c_ptr[row], kernel.c_ptr[row + 1]):
            weight += abs(kernel.c_val[a])
        trace.rounding[k, e] = ROUNDING * weight * weight * largest
        trace.mean[k, e] = base[row] + row_mean(kernel, est.x, row)
        trace.variance[k, e] = variance
        for i in range(len(kernel.q)):
            trace.cross[k, e, i] = v[i]
    return True


@njit(cache=True)
def _admit(
    kernel: Kernel, est: EstimatorState, base: Floats, at: tuple[int, int], data: ScalarReadings, used: Ints
) -> None:
    """Which of the readings ``at`` (first, stop) of one cycle are used: the live cycle's gate, before any correction."""
    every = gates_open(est.streak)
    for m in range(at[0], at[1]):
        row = data.row[m]
        used[m] = 1
        if row < kernel.n_sensors:
            innovation = data.value[m] - (base[row] + row_mean(kernel, est.x, row))
            sd = np.sqrt(row_variance(kernel, est.P, row) + data.variance[m])
            used[m] = 1 if passes(kernel.gate, est.streak, row, innovation, sd) or every else 0


@njit(cache=True)
def _end_of_cycle(at: Ints, first: int, k: int) -> int:
    """The first entry from ``first`` on that lies after cycle k."""
    stop = first
    while stop < len(at) and at[stop] == k:
        stop += 1
    return stop


@njit(cache=True)
def run_forward(kernel: Kernel, est: EstimatorState, data: ScalarReadings, trace: Trace) -> bool:
    """The filter over a block of cycles, bit for bit that of the live cycle; False where a variance is not positive.

    ``est`` is a work array: it holds the prediction for the cycle after the block. ``trace`` is filled.
    """
    n = len(kernel.q)
    v, K, M = np.zeros(n), np.zeros(n), np.zeros((n, n))
    base = np.zeros(kernel.n_sensors + kernel.n_estimates)
    work = np.zeros(len(kernel.steady) + 1)
    used = np.zeros(len(data.at), dtype=np.int64)
    stop = 0
    for k in range(data.u.shape[0]):
        follow_schedules(kernel, data.u[k])
        accept_inputs(kernel, est, data.u[k])
        input_driven_outputs(kernel, est, base)
        first, stop = stop, _end_of_cycle(data.at, stop, k)
        _admit(kernel, est, base, (first, stop), data, used)
        for m in range(first, stop):
            if used[m] == 0:
                trace.s[m] = np.inf
                continue
            row, r = data.row[m], data.variance[m]
            deviation = data.value[m] - base[row]
            trace.innovation[m] = deviation - row_mean(kernel, est.x, row)
            if not correct(kernel, est.x, est.P, row, deviation, r, v, K):
                return False
            trace.s[m] = row_mean(kernel, v, row) + r
            for i in range(n):
                trace.gain[m, i] = K[i]
        if not _note_estimates(kernel, est, base, k, trace, v):
            return False
        advance_input_driven(kernel, est, work)
        predict(kernel, est.x, est.P, v, M)
    return True


@njit(cache=True)
def _take_reading(kernel: Kernel, row: int, K: Floats, e: float, s: float, adj: Adjoint, w: Floats) -> None:
    """Back over one scalar correction: r, N of the state after it become those of the state before it."""
    n = len(kernel.q)
    along, inside = 0.0, 0.0
    for i in range(n):
        along += K[i] * adj.r[i]
        total = 0.0
        for j in range(n):
            total += adj.N[i, j] * K[j]
        w[i] = total
    for i in range(n):
        inside += K[i] * w[i]
    first, stop = kernel.c_ptr[row], kernel.c_ptr[row + 1]
    for a in range(first, stop):
        i, c = kernel.c_idx[a], kernel.c_val[a]
        adj.r[i] += c * (e / s - along)
        for j in range(n):
            adj.N[i, j] -= c * w[j]
            adj.N[j, i] -= c * w[j]
    for a in range(first, stop):
        i = kernel.c_idx[a]
        for b in range(first, stop):
            adj.N[i, kernel.c_idx[b]] += (inside + 1.0 / s) * (kernel.c_val[a] * kernel.c_val[b])


@njit(cache=True)
def _cycle_before(kernel: Kernel, adj: Adjoint, w: Floats, M: Floats) -> None:
    """r <- A' r, N <- A' N A, with A in compressed rows; N is kept exactly symmetric."""
    n = len(kernel.q)
    for i in range(n):
        w[i] = 0.0
        for j in range(n):
            M[i, j] = 0.0
    for k in range(n):
        for a in range(kernel.a_ptr[k], kernel.a_ptr[k + 1]):
            i, value = kernel.a_idx[a], kernel.a_val[a]
            w[i] += value * adj.r[k]
            for j in range(n):
                M[i, j] += value * adj.N[k, j]
    for i in range(n):
        adj.r[i] = w[i]
        for j in range(n):
            adj.N[i, j] = 0.0
    for i in range(n):
        for k in range(n):
            for a in range(kernel.a_ptr[k], kernel.a_ptr[k + 1]):
                j = kernel.a_idx[a]
                if j >= i:
                    adj.N[i, j] += M[i, k] * kernel.a_val[a]
    for i in range(n):
        for j in range(i + 1, n):
            adj.N[j, i] = adj.N[i, j]


@njit(cache=True)
def _smooth_cycle(kernel: Kernel, trace: Trace, k: int, adj: Adjoint, mean: Floats, variance: Floats) -> bool:
    """Smoothed mean and variance of every estimate at cycle k; False where a variance is negative beyond rounding."""
    n = len(kernel.q)
    for e in range(kernel.n_estimates):
        change, known = 0.0, 0.0
        for i in range(n):
            v = trace.cross[k, e, i]
            change += v * adj.r[i]
            total = 0.0
            for j in range(n):
                total += adj.N[i, j] * trace.cross[k, e, j]
            known += v * total
        mean[k, e] = trace.mean[k, e] + change
        left = trace.variance[k, e] - known
        if not left >= -trace.rounding[k, e]:
            return False
        variance[k, e] = max(left, 0.0)
    return True


@njit(cache=True)
def run_backward(
    kernel: Kernel, data: ScalarReadings, trace: Trace, adj: Adjoint, mean: Floats, variance: Floats
) -> bool:
    """Smoothed mean and variance (N, n_estimates) of a block; False where a variance is negative beyond rounding.

    ``adj`` is a work array: it comes from the block after and holds what the block before needs.
    """
    n = len(kernel.q)
    w, M = np.zeros(n), np.zeros((n, n))
    m = len(data.at) - 1
    for k in range(data.u.shape[0] - 1, -1, -1):
        follow_schedules(kernel, data.u[k])
        _cycle_before(kernel, adj, w, M)
        if not _smooth_cycle(kernel, trace, k, adj, mean, variance):
            return False
        while m >= 0 and data.at[m] == k:
            _take_reading(kernel, data.row[m], trace.gain[m], trace.innovation[m], trace.s[m], adj, w)
            m -= 1
    return True
