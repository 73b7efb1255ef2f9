"""The input-driven part, compiled: paths held over each sample, dead times in a ring buffer of past inputs."""

from __future__ import annotations

from softsensor.estimation.compiling import inlined, uncounted
from softsensor.estimation.kernel import EstimatorState, Floats, Kernel


@uncounted
def accept_inputs(kernel: Kernel, state: EstimatorState, u: Floats) -> None:
    """Put this cycle's inputs (engineering units) at the head of the ring; the first ones are taken as steady."""
    first = state.head[0] < 0
    head = 0 if first else (state.head[0] + 1) % kernel.ring
    for j in range(kernel.n_inputs):
        deviation = u[j] - kernel.operating_u[j]
        state.u_past[j, head] = deviation
        if first:
            for lag in range(kernel.ring):
                state.u_past[j, lag] = deviation
    if first:
        for b in range(len(kernel.block_source)):
            deviation = state.u_past[kernel.block_source[b], 0]
            start = kernel.block_state[b]
            for i in range(start, start + kernel.block_size[b]):
                state.x_in[i] = kernel.steady[i] * deviation
    state.head[0] = head


@inlined
def past_column(head: int, delay: int, ring: int) -> int:
    """Column of u(k - delay) in the ring of past inputs; 0 <= delay < ring."""
    column = head - delay
    return column if column >= 0 else column + ring


@uncounted
def input_driven_outputs(kernel: Kernel, state: EstimatorState, out: Floats) -> None:
    """Operating point plus input-driven part of every output at this cycle, into ``out``."""
    head, ring, u_past, x_in = state.head[0], kernel.ring, state.u_past, state.x_in
    for i in range(kernel.n_sensors + kernel.n_estimates):
        out[i] = kernel.operating_y[i]
    for b in range(len(kernel.block_source)):
        total = 0.0
        start = kernel.block_state[b]
        for i in range(start, start + kernel.block_size[b]):
            total += kernel.c_in[i] * x_in[i]
        if kernel.block_d[b] != 0.0:
            column = past_column(head, kernel.block_whole[b] + kernel.block_older[b], ring)
            total += kernel.block_d[b] * u_past[kernel.block_source[b], column]
        out[kernel.block_row[b]] += total


@uncounted
def advance_input_driven(kernel: Kernel, state: EstimatorState, work: Floats) -> None:
    """x(k+1) = phi x(k) + gamma_recent u(k-m) + gamma_older u(k-m-1), path by path."""
    head, ring, u_past, x_in = state.head[0], kernel.ring, state.u_past, state.x_in
    for b in range(len(kernel.block_source)):
        size, start, at = kernel.block_size[b], kernel.block_state[b], kernel.block_phi[b]
        source, whole = kernel.block_source[b], kernel.block_whole[b]
        recent = u_past[source, past_column(head, whole, ring)]
        older = u_past[source, past_column(head, whole + 1, ring)]
        for i in range(size):
            total = kernel.gamma_recent[start + i] * recent + kernel.gamma_older[start + i] * older
            for j in range(size):
                total += kernel.phi[at + i * size + j] * x_in[start + j]
            work[i] = total
        for i in range(size):
            x_in[start + i] = work[i]
