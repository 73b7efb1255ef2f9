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

from softsensor.estimation.compiling import inner
from softsensor.estimation.exponentials import exponentiate, multiply
from softsensor.estimation.kernel import Floats, Kernel
from softsensor.estimation.schedule_tables import Schedules

FOLLOWING = ("block_d", "phi", "gamma_recent", "gamma_older", "c_in", "steady", "a_val", "c_val")
"""The arrays of the kernel that follow schedules."""


def private(kernel: Kernel) -> Kernel:
    """A kernel whose scheduled arrays may be written; the very kernel where it has no schedules."""
    schedules = kernel.schedules
    if not len(schedules.tag):
        return kernel
    own = {name: getattr(kernel, name).copy() for name in FOLLOWING}
    work = {name: getattr(schedules, name).copy() for name in ("lags_now", "c_now", "work")}
    return kernel._replace(
        **own, schedules=schedules._replace(last=np.full(len(schedules.tag), np.nan), **work)
    )


@inner
def follow_schedules(kernel: Kernel, u: Floats) -> None:
    """Bring the scheduled arrays of a private kernel to the inputs ``u`` (n_inputs,) of a cycle."""
    table = kernel.schedules
    for s in range(len(table.tag)):
        value = u[table.tag[s]]
        if value != table.last[s]:
            table.last[s] = value
            gain = _interpolate(table, s, value)
            direct = gain * _cascade(table, s)
            _hold(table, s)
            if table.block[s] >= 0:
                _to_input(kernel, s, gain, direct)
            else:
                _to_disturbance(kernel, s, gain, direct)


@inner
def _interpolate(table: Schedules, s: int, value: float) -> float:
    """The gain at a value of the tag; the time constants there into the work space."""
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


@inner
def _cascade(table: Schedules, s: int) -> float:
    """[0 0; B A] and C of the path's cascade without its gain into the work space; returns D. ::

    x_i' = (u_i - x_i)/T_i,   y_i = (1 - L_i/T_i) x_i + (L_i/T_i) u_i,   u_{i+1} = y_i
    """
    M, c = table.work[0], table.c_now
    n, lags, direct = table.size[s], table.n_lags[s], 1.0
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
    if lags == n:
        return float(direct)
    M[n, 0] = direct
    for j in range(lags):
        M[n, j + 1] = c[j]
        c[j] = 0.0
    c[lags] = 1.0
    return 0.0


@inner
def _hold(table: Schedules, s: int) -> None:
    """The matrix in the work space held over the last part of a sample, work[1], and over all of it, work[2]."""
    n, fraction, h = table.size[s] + 1, table.fraction[s], table.sample_time
    M, after, whole, before, other = table.work[0], table.work[1], table.work[2], table.work[3], table.work[4]
    exponentiate(M, n, (1.0 - fraction) * h, after, other)
    if fraction > 0.0:
        exponentiate(M, n, fraction * h, before, other)
        multiply(after, before, n, whole)
    else:
        for i in range(n):
            for j in range(n):
                whole[i, j] = after[i, j]


@inner
def _to_input(kernel: Kernel, s: int, gain: float, direct: float) -> None:
    """From the work space into the arrays of an input-driven path."""
    table = kernel.schedules
    after, whole, n, start = table.work[1], table.work[2], table.size[s], table.state[s]
    at = kernel.block_phi[table.block[s]]
    kernel.block_d[table.block[s]] = direct
    for i in range(n):
        recent = after[i + 1, 0]
        kernel.c_in[start + i] = table.c_now[i]
        kernel.steady[start + i] = gain if i < table.n_lags[s] else 0.0
        kernel.gamma_recent[start + i] = gain * recent
        kernel.gamma_older[start + i] = gain * (whole[i + 1, 0] - recent)
        for j in range(n):
            kernel.phi[at + i * n + j] = whole[i + 1, j + 1]


@inner
def _to_disturbance(kernel: Kernel, s: int, gain: float, direct: float) -> None:
    """From the work space into A and C: each row of A has the disturbance's recent value, its older one where the dead time
    has a fraction, then the path's own states so far.
    """
    table = kernel.schedules
    after, whole = table.work[1], table.work[2]
    for i in range(table.size[s]):
        entry, recent = kernel.a_ptr[table.state[s] + i], after[i + 1, 0]
        kernel.a_val[entry] = gain * recent
        if table.fraction[s] > 0.0:
            entry += 1
            kernel.a_val[entry] = gain * (whole[i + 1, 0] - recent)
        for j in range(i + 1):
            kernel.a_val[entry + 1 + j] = whole[i + 1, j + 1]
        kernel.c_val[table.c_at[s] + i] = table.c_now[i]
    if table.d_at[s] >= 0:
        kernel.c_val[table.d_at[s]] = direct
