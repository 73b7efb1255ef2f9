"""One path of the plant by other means than the program's: companion matrices, step responses, matrix exponentials.

Written from the contract's sections 1 and 2 only. Time runs in sample times here: s is per sample, dead times are in
samples, so that a companion matrix stays well scaled whatever the plant's own pace.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from plant_models.specification import PathSpec

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
WHOLE = 1e-9
"""A dead time this close to a whole number of samples is that number of samples."""


@dataclass(frozen=True)
class ContinuousPath:
    """dx/dt = A x + b v, y = c x + d v, v the source delayed by ``delay``; time in samples.

    The integrator of an integrating path comes last and integrates the output of the lags before it.
    """

    A: Array
    b: Array
    c: Array
    d: float
    delay: float
    integrating: bool

    @property
    def order(self) -> int:
        return int(self.b.size)

    @property
    def lags(self) -> int:
        """How many states come before the integrator."""
        return self.order - int(self.integrating)

    @property
    def steady(self) -> Array:
        """The state that a constant unit source leads to; the integrator at zero."""
        state = np.zeros(self.order)
        n = self.lags
        if n:
            state[:n] = np.linalg.solve(self.A[:n, :n], -self.b[:n])
        return state

    @property
    def slope(self) -> float:
        """How fast the integrator moves in that steady state, per sample."""
        return float(self.A[-1] @ self.steady + self.b[-1]) if self.integrating else 0.0


def rational(path: PathSpec, sample_time: float) -> tuple[Array, Array]:
    """Numerator and denominator in descending powers of s, s per sample."""
    if path.numerator is not None:
        assert path.denominator is not None
        num, den = np.array(path.numerator), np.array(path.denominator)
    else:
        assert path.gain is not None
        num = np.array([path.gain])
        den = np.array([1.0])
        for lead in path.lead_times:
            num = np.polymul(num, [lead, 1.0])
        for lag in path.time_constants:
            den = np.polymul(den, [lag, 1.0])
        if path.integrating:
            den = np.polymul(den, [1.0, 0.0])
    num, den = np.trim_zeros(num, "f"), np.trim_zeros(den, "f")
    num = num / sample_time ** np.arange(num.size - 1, -1, -1)
    den = den / sample_time ** np.arange(den.size - 1, -1, -1)
    return num / den[0], den / den[0]


def continuous(path: PathSpec, sample_time: float) -> ContinuousPath:
    """A path as a companion matrix, and an integrator behind it where the path integrates."""
    num, den = rational(path, sample_time)
    delay = path.dead_time / sample_time
    if not (den.size > 1 and den[-1] == 0.0):
        A, b, c, d = companion(num, den)
        return ContinuousPath(A, b, c, d, delay, False)
    through, rest = 0.0, num
    if num.size == den.size:
        through = float(num[0])
        rest = num[1:] - through * den[1:]
    A, b, c, d = companion(rest, den[:-1])
    n = b.size
    whole = np.zeros((n + 1, n + 1))
    whole[:n, :n], whole[n, :n] = A, c
    return ContinuousPath(whole, np.append(b, d), np.append(np.zeros(n), 1.0), through, delay, True)


def companion(num: Array, den: Array) -> tuple[Array, Array, Array, float]:
    """Controllable companion form of num/den, den monic and of no lower degree than num."""
    n = den.size - 1
    num = np.append(np.zeros(n + 1 - num.size), num)
    A = np.zeros((n, n))
    if n:
        A[0] = -den[1:]
        A[1:, :-1] = np.eye(n - 1)
    b = np.zeros(n)
    b[:1] = 1.0
    return A, b, num[1:] - num[0] * den[1:], float(num[0])


def split_delay(delay: float) -> tuple[int, float]:
    """Whole samples and the rest of a dead time."""
    nearest = round(delay)
    if abs(delay - nearest) < WHOLE:
        return nearest, 0.0
    return int(np.floor(delay)), delay - np.floor(delay)


def step_response(path: ContinuousPath, count: int) -> Array:
    """Output at samples 0 ... count-1 after a unit step of the source at sample 0, from rest.

    The step reaches the path between samples where the dead time ends there.
    """
    whole, rest = split_delay(path.delay)
    first = whole + (rest > 0.0)
    n = path.order
    M = np.zeros((n + 1, n + 1))
    M[:n, :n], M[:n, n] = path.A, path.b
    state = np.append(np.zeros(n), 1.0)
    if rest > 0.0:
        state = expm(M * (1.0 - rest)) @ state
    onward = expm(M)
    out = np.zeros(count)
    for k in range(first, count):
        out[k] = path.c @ state[:n] + path.d
        state = onward @ state
    return out


def response_to_held(path: ContinuousPath, u: Array) -> Array:
    """Output at every cycle for the deviations ``u`` (N,), each held to the next, from steady state with u[0].

    A held input is a staircase: the steady response to its first value, and a step response for every later
    change.
    """
    count = u.size
    at_start = path.c @ path.steady + path.d
    out = u[0] * (at_start + path.slope * np.arange(count))
    changes = np.diff(u, prepend=u[0])
    return np.asarray(out + np.convolve(changes, step_response(path, count))[:count])


def held_transition(path: ContinuousPath) -> tuple[Array, Array, Array]:
    """Phi, and the columns for the older and the recent of the two values that a sample's dead time spans.

    Within one sample the path sees the older value while the rest of the dead time lasts, then the recent one:
    two linear systems run after one another.
    """
    _, rest = split_delay(path.delay)
    n = path.order
    with_older, with_recent = np.zeros((n + 2, n + 2)), np.zeros((n + 2, n + 2))
    with_older[:n, :n] = with_recent[:n, :n] = path.A
    with_older[:n, n] = with_recent[:n, n + 1] = path.b
    whole = expm(with_recent * (1.0 - rest)) @ expm(with_older * rest)
    return whole[:n, :n], whole[:n, n], whole[:n, n + 1]
