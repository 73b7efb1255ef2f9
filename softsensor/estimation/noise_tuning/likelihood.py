"""The likelihood of readings under a noise model, compiled, with exact derivatives by forward sensitivities.

The readings of a cycle are taken one by one, as the estimator takes them, so that the likelihood is a product over
scalar innovations (Schweppe 1965; Durbin & Koopman 2012, ch. 6 and 7)::

    log L = -1/2 sum [ log(2 pi s) + e^2 / s ],   e = z - c x,  s = c P c' + r

Differentiating the recursion once gives the gradient and, from the same derivatives, the expected information::

    d log L = -1/2 sum [ ds/s + 2 e de/s - e^2 ds/s^2 ]
    I_jl    =  sum [ ds_j ds_l / (2 s^2) + de_j de_l / s ]
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from softsensor.estimation.kernel import Floats, Ints
from softsensor.estimation.noise_tuning.courses import Course
from softsensor.estimation.noise_tuning.deviations import Deviations
from softsensor.estimation.noise_tuning.parameters import NoiseModel


class Likelihood(NamedTuple):
    """log L of the readings counted, their number, gradient (p,) and expected information (p, p)."""

    value: float
    readings: int
    gradient: Floats
    information: Floats


@njit(cache=True)
def _row_times(ptr: Ints, idx: Ints, val: Floats, row: int, x: Floats) -> float:
    total = 0.0
    for e in range(ptr[row], ptr[row + 1]):
        total += val[e] * x[idx[e]]
    return total


@njit(cache=True)
def _row_of(part: NoiseModel, row: int, P: Floats, v: Floats) -> float:
    """v = P c' of one sensor; returns c P c'."""
    n = len(v)
    for i in range(n):
        v[i] = 0.0
    for e in range(part.c_ptr[row], part.c_ptr[row + 1]):
        j, value = part.c_idx[e], part.c_val[e]
        for i in range(n):
            v[i] += P[j, i] * value
    return _row_times(part.c_ptr, part.c_idx, part.c_val, row, v)


@njit(cache=True)
def _transition(part: NoiseModel, P: Floats, M: Floats) -> None:
    """P = A P A' of a symmetric P, with M (n, n) to work in."""
    n = len(part.q)
    for i in range(n):
        for k in range(n):
            M[i, k] = 0.0
        for e in range(part.a_ptr[i], part.a_ptr[i + 1]):
            j, value = part.a_idx[e], part.a_val[e]
            for k in range(n):
                M[i, k] += value * P[j, k]
    for i in range(n):
        for k in range(i, n):
            total = 0.0
            for e in range(part.a_ptr[k], part.a_ptr[k + 1]):
                total += M[i, part.a_idx[e]] * part.a_val[e]
            P[i, k] = total
            P[k, i] = total


@njit(cache=True)
def _advance(part: NoiseModel, x: Floats, work: Floats) -> None:
    """x = A x."""
    n = len(part.q)
    for i in range(n):
        work[i] = _row_times(part.a_ptr, part.a_idx, part.a_val, i, x)
    for i in range(n):
        x[i] = work[i]


@njit(cache=True)
def _predict(
    part: NoiseModel, x: Floats, P: Floats, dx: Floats, dP: Floats, work: Floats, cross: Floats, M: Floats
) -> None:
    """One sample on, state and sensitivities: dP+ = A dP A' + dA P A' + A P dA' + dQ."""
    n = len(part.q)
    for j in range(len(part.dq)):
        at = part.phi_at[j]
        _advance(part, dx[j], work)
        _transition(part, dP[j], M)
        if at >= 0 and part.dphi[j] != 0.0:
            dx[j, at] += part.dphi[j] * x[at]
            for i in range(n):
                cross[i] = part.dphi[j] * _row_times(part.a_ptr, part.a_idx, part.a_val, i, P[at])
            for i in range(n):
                dP[j, at, i] += cross[i]
                dP[j, i, at] += cross[i]
        if part.q_at[j] >= 0:
            dP[j, part.q_at[j], part.q_at[j]] += part.dq[j]
    _advance(part, x, work)
    _transition(part, P, M)
    for i in range(n):
        P[i, i] += part.q[i]


@njit(cache=True)
def _correct(v: Floats, s: float, e: float, x: Floats, P: Floats) -> None:
    n = len(x)
    for i in range(n):
        gain = v[i] / s
        x[i] += gain * e
        for k in range(i, n):
            P[i, k] -= gain * v[k]
            P[k, i] = P[i, k]


@njit(cache=True)
def _correct_sensitivity(
    v: Floats, s: float, e: float, dv: Floats, ds: float, de: float, dx: Floats, dP: Floats
) -> None:
    """d(v e / s) and d(v v' / s), before v changes."""
    n = len(dx)
    for i in range(n):
        gain, dgain = v[i] / s, (dv[i] - v[i] * ds / s) / s
        dx[i] += dgain * e + gain * de
        for k in range(i, n):
            dP[i, k] -= dgain * v[k] + gain * dv[k]
            dP[k, i] = dP[i, k]


@njit(cache=True)
def _bring(part: NoiseModel, course: Course, k: int) -> None:
    """A and C of cycle k."""
    for e in range(len(course.a_to)):
        part.a_val[course.a_to[e]] = course.a_val[k, e]
    for e in range(len(course.c_to)):
        part.c_val[course.c_to[e]] = course.c_val[k, e]


@njit(cache=True)
def _run(
    part: NoiseModel, z: Floats, scale: Floats, course: Course, first: int, grad: Floats, info: Floats
) -> tuple[float, int]:
    n, p = len(part.q), len(part.dq)
    x, P, dx, dP = np.zeros(n), part.P0.copy(), np.zeros((p, n)), part.P0_change.copy()
    v, dv, work, cross, M = np.zeros(n), np.zeros((p, n)), np.zeros(n), np.zeros(n), np.zeros((n, n))
    ds, de = np.zeros(p), np.zeros(p)
    value, count = 0.0, 0
    for k in range(z.shape[0]):
        _bring(part, course, k)
        for i in range(z.shape[1]):
            if z[k, i] != z[k, i]:
                continue
            s = _row_of(part, i, P, v) + part.r[i] * scale[k, i]
            if not s > 0.0:
                return np.nan, k
            e = z[k, i] - _row_times(part.c_ptr, part.c_idx, part.c_val, i, x)
            for j in range(p):
                ds[j] = _row_of(part, i, dP[j], dv[j])
                if part.r_at[j] == i:
                    ds[j] += part.dr[j] * scale[k, i]
                de[j] = -_row_times(part.c_ptr, part.c_idx, part.c_val, i, dx[j])
            if k >= first:
                value -= 0.5 * (np.log(2.0 * np.pi * s) + e * e / s)
                count += 1
                for j in range(p):
                    grad[j] -= 0.5 * (ds[j] / s + 2.0 * e * de[j] / s - e * e * ds[j] / (s * s))
                    for m in range(p):
                        info[j, m] += 0.5 * ds[j] * ds[m] / (s * s) + de[j] * de[m] / s
            for j in range(p):
                _correct_sensitivity(v, s, e, dv[j], ds[j], de[j], dx[j], dP[j])
            _correct(v, s, e, x, P)
        _predict(part, x, P, dx, dP, work, cross, M)
    return value, count


def innovations_likelihood(part: NoiseModel, data: Deviations, first: int = 0) -> Likelihood:
    """The likelihood of deviations from the input-driven part; A and C of ``part`` are left as in the last cycle.

    :param first: cycles before this one only lead in; they are not counted.
    :return: with the value nan where an innovation's variance is not positive.
    """
    p = len(part.dq)
    gradient, information = np.zeros(p), np.zeros((p, p))
    z, scale = np.ascontiguousarray(data.z), np.ascontiguousarray(data.scale)
    value, count = _run(part, z, scale, data.course, first, gradient, information)
    return Likelihood(value, count, gradient, information)
