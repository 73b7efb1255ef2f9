"""Paths whose parameters change with a measured input, compiled: their arrays in the kernel brought up to date.

Before each cycle, for each scheduled path whose tag has another value than in the cycle before::

    gain, T_1 ... T_n   linear between the points of the schedule, held outside
    x' = A x + gain B u,  y = C x + gain D u      a cascade of (L_i s + 1)/(T_i s + 1), perhaps with an integrator behind it
    [1 0; b(t) Phi(t)]  = e^{[0 0; B A] t}        the exact zero-order hold over t

    Phi = Phi((1-f)h) Phi(f h),   gamma_recent = gain b((1-f)h),   gamma_older = gain Phi((1-f)h) b(f h)

with h the sample time and f the fraction of a sample in the dead time. What is written depends on the inputs of the cycle
alone, so none of it is state: wherever a block of cycles begins, the same bits come out. See
:mod:`plant_models.schedules` for what is meant by it.
"""

from __future__ import annotations

import numpy as np

from softsensor.estimation.compiling import uncounted
from softsensor.estimation.exponentials import exponentiate, multiply
from softsensor.estimation.kernel import Floats, Kernel

FOLLOWING = ("block_d", "phi", "gamma_recent", "gamma_older", "c_in", "steady")
"""The arrays of the kernel that follow schedules."""


def private(kernel: Kernel) -> Kernel:
    """A kernel whose scheduled arrays may be written; the very kernel where it has no schedules."""
    schedules = kernel.schedules
    if not len(schedules.block):
        return kernel
    own = {name: getattr(kernel, name).copy() for name in FOLLOWING}
    work = {name: getattr(schedules, name).copy() for name in ("lags_now", "work")}
    return kernel._replace(
        **own, schedules=schedules._replace(last=np.full(len(schedules.block), np.nan), **work)
    )


@uncounted
def follow_schedules(kernel: Kernel, u: Floats) -> None:
    """Bring the scheduled arrays of a private kernel to the inputs ``u`` (n_inputs,) of a cycle."""
    schedules = kernel.schedules
    for s in range(len(schedules.block)):
        value = u[schedules.tag[s]]
        if value != schedules.last[s]:
            schedules.last[s] = value
            gain = _interpolate(kernel, s, value)
            _cascade(kernel, s, gain)
            _hold(kernel, s, gain)


@uncounted
def _interpolate(kernel: Kernel, s: int, value: float) -> float:
    """The gain at a value of the tag; the time constants there into the work space."""
    table = kernel.schedules
    lower, last = table.first[s], table.first[s + 1] - 1
    upper, share = lower, 0.0
    if value >= table.at[last]:
        lower = upper = last
    elif value > table.at[lower]:
        while value >= table.at[upper]:
            upper += 1
        lower = upper - 1
        share = (value - table.at[lower]) / (table.at[upper] - table.at[lower])
    for i in range(table.n_lags[s]):
        low, high = table.lags[lower, i], table.lags[upper, i]
        table.lags_now[i] = low + share * (high - low)
    return float(table.gain[lower] + share * (table.gain[upper] - table.gain[lower]))


@uncounted
def _cascade(kernel: Kernel, s: int, gain: float) -> None:
    """[0 0; B A] of the path's cascade into the work space; its C, D and steady state into the kernel. ::

    x_i' = (u_i - x_i)/T_i,   y_i = (1 - L_i/T_i) x_i + (L_i/T_i) u_i,   u_{i+1} = y_i
    """
    table, M = kernel.schedules, kernel.schedules.work[0]
    b = table.block[s]
    n, lags, start = kernel.block_size[b], table.n_lags[s], kernel.block_state[b]
    c, direct = kernel.c_in[start : start + n], 1.0
    for i in range(n + 1):
        for j in range(n + 1):
            M[i, j] = 0.0
    for i in range(lags):
        lag, lead = table.lags_now[i], table.leads[s, i]
        M[i + 1, 0] = direct / lag
        for j in range(i):
            M[i + 1, j + 1] = c[j] / lag
            c[j] *= lead / lag
        M[i + 1, i + 1] = -1.0 / lag
        c[i] = 1.0 - lead / lag
        direct *= lead / lag
        kernel.steady[start + i] = gain
    kernel.block_d[b] = gain * direct
    if lags < n:
        M[n, 0] = direct
        for j in range(lags):
            M[n, j + 1] = c[j]
            c[j] = 0.0
        c[lags] = 1.0
        kernel.block_d[b] = 0.0


@uncounted
def _hold(kernel: Kernel, s: int, gain: float) -> None:
    """The matrix in the work space held over a sample, into the kernel's phi and gamma."""
    table = kernel.schedules
    b, fraction, h = table.block[s], table.fraction[s], table.sample_time
    n, start, at = kernel.block_size[b], kernel.block_state[b], kernel.block_phi[b]
    M, after, whole, before, other = table.work[0], table.work[1], table.work[2], table.work[3], table.work[4]
    exponentiate(M, n + 1, (1.0 - fraction) * h, after, other)
    result = after
    if fraction > 0.0:
        exponentiate(M, n + 1, fraction * h, before, other)
        multiply(after, before, n + 1, whole)
        result = whole
    for i in range(n):
        recent = after[i + 1, 0]
        kernel.gamma_recent[start + i] = gain * recent
        kernel.gamma_older[start + i] = gain * (result[i + 1, 0] - recent)
        for j in range(n):
            kernel.phi[at + i * n + j] = result[i + 1, j + 1]
