"""The estimator's part of one cycle, compiled: innovations, gate, corrections, report, prediction.

Twice the same steps, with the same bits: :func:`filter_cycle` for any model, :func:`filter_eight` for one of up to eight
states. Both return the next laboratory result's index, or UNSOUND where a variance is not positive.
"""

from __future__ import annotations

import numpy as np

from softsensor.block_arrays import BlockInputs, BlockOutputs, WorkSpace
from softsensor.estimation.compiling import inlined
from softsensor.estimation.eight_states import combine, correct_eight, dot, predict_eight
from softsensor.estimation.gate import gates_open, passes
from softsensor.estimation.kalman import row_mean, row_variance, unless_rounding
from softsensor.estimation.kernel import Floats, Ints, Kernel
from softsensor.estimation.pending import (
    bring_all,
    bring_rows,
    correct_pending,
    predict_pending,
)

UNSOUND = -1
"""Returned where an innovation variance is not positive and finite."""
MOST_SQUARE = 16.0
"""A whitened innovation's square counts up to this in the joint test: one spike is no misfit of the model."""


@inlined
def _admit(
    kernel: Kernel, streak: Ints, k: int, data: BlockInputs, out: BlockOutputs, kept_out: Ints
) -> None:
    """Which readings of the cycle correct the estimate, into ``out.used``, and which the gate has ``kept_out``
    (n_sensors,); its ``streak`` goes on.
    """
    every = gates_open(streak)
    for i in range(kernel.n_sensors):
        out.used[k, i] = kept_out[i] = 0
        if data.use[k, i] != 0 and data.y[k, i] == data.y[k, i]:
            innovation, sd = out.innovation[k, i], out.innovation_sd[k, i]
            out.used[k, i] = 1 if passes(kernel.gate, streak, i, innovation, sd) or every else 0
            kept_out[i] = 1 - out.used[k, i]


@inlined
def _note(k: int, i: int, predicted: float, variance: float, data: BlockInputs, out: BlockOutputs) -> None:
    """A sensor's prediction before any reading of the cycle; its reading's innovation."""
    out.predicted[k, i] = predicted
    out.innovation_sd[k, i] = np.sqrt(variance)
    out.innovation[k, i] = data.y[k, i] - predicted if data.y[k, i] == data.y[k, i] else np.nan


@inlined
def _end_of_labs(data: BlockInputs, lab: int, k: int) -> int:
    """The first laboratory result from ``lab`` on that counts after cycle k."""
    stop = lab
    while stop < len(data.lab_at) and data.lab_at[stop] == k:
        stop += 1
    return stop


@inlined
def _taken(
    kernel: Kernel, k: int, sensor: int, lab: int, base: Floats, data: BlockInputs
) -> tuple[int, float, float]:
    """Of a sensor's reading, or behind the last sensor of a laboratory result: its row, deviation from the input-driven
    part and variance."""
    if sensor < kernel.n_sensors:
        return sensor, data.y[k, sensor] - base[sensor], kernel.r[sensor] * data.scale[k, sensor]
    row = data.lab_row[lab]
    return row, data.lab_value[lab] - base[row], data.lab_variance[lab]


@inlined
def filter_cycle(
    kernel: Kernel,
    P: Floats,
    other: Floats,
    k: int,
    streak: Ints,
    data: BlockInputs,
    out: BlockOutputs,
    lab: int,
    space: WorkSpace,
) -> int:
    """One cycle from the prediction ``P``, ``space.x`` to the next, into ``other``."""
    x, base, pending = space.x, space.base, space.pending
    for i in range(kernel.n_sensors):
        variance = row_variance(kernel, P, i) + kernel.r[i] * data.scale[k, i]
        _note(k, i, base[i] + row_mean(kernel, x, i), variance, data, out)
    _admit(kernel, streak, k, data, out, space.kept_out)
    stop = _end_of_labs(data, lab, k)
    for e in range(lab, stop):
        row = data.lab_row[e]
        out.lab_predicted[e] = base[row] + row_mean(kernel, x, row)
        out.lab_sd[e] = np.sqrt(row_variance(kernel, P, row) + data.lab_variance[e])
    count = _correct_pending(kernel, P, k, data, out, (lab, stop), space)
    if count < 0:
        return UNSOUND
    for e in range(kernel.n_estimates):
        row = kernel.n_sensors + e
        out.estimate[k, e] = base[row] + row_mean(kernel, x, row)
        bring_rows(kernel, P, pending, count, row)
        variance = row_variance(kernel, P, row)
        if not variance >= 0.0:
            bring_all(P, pending, count)
            variance = unless_rounding(kernel, P, row, variance)
            if not variance >= 0.0:
                return UNSOUND
        out.estimate_sd[k, e] = np.sqrt(variance)
    predict_pending(kernel, x, P, pending, count, space.v, other)
    return stop


@inlined
def _correct_pending(
    kernel: Kernel,
    P: Floats,
    k: int,
    data: BlockInputs,
    out: BlockOutputs,
    labs: tuple[int, int],
    space: WorkSpace,
) -> int:
    """Sensors in file order, then laboratory results; returns how many corrections wait, or UNSOUND."""
    x, pending, count, squares, sensors = space.x, space.pending, 0, 0.0, kernel.n_sensors
    for j in range(sensors + labs[1] - labs[0]):
        if j < sensors and out.used[k, j] == 0:
            squares += 1.0
            continue
        row, deviation, r = _taken(kernel, k, j, labs[0] + j - sensors, space.base, data)
        innovation = deviation - row_mean(kernel, x, row)
        s = correct_pending(kernel, x, P, pending, count, row, innovation, r, space.v)
        if s == 0.0:
            return UNSOUND
        if j < sensors:
            squares += min(innovation * innovation / s, MOST_SQUARE)
        count += 1
    out.squares[k] = squares
    return count


@inlined
def filter_eight(
    kernel: Kernel,
    P: Floats,
    other: Floats,
    k: int,
    streak: Ints,
    data: BlockInputs,
    out: BlockOutputs,
    lab: int,
    space: WorkSpace,
) -> int:
    """As :func:`filter_cycle`, for up to eight states."""
    x, base, model = space.x, space.base, kernel.eight
    for i in range(kernel.n_sensors):
        combine(model.C[i], P, space.Pc[i])
        space.CPC[i] = dot(model.C[i], space.Pc[i])
        variance = space.CPC[i] + kernel.r[i] * data.scale[k, i]
        _note(k, i, base[i] + dot(model.C[i], x), variance, data, out)
    _admit(kernel, streak, k, data, out, space.kept_out)
    stop = _end_of_labs(data, lab, k)
    for e in range(lab, stop):
        row = data.lab_row[e]
        combine(model.C[row], P, space.Pc[row])
        out.lab_predicted[e] = base[row] + dot(model.C[row], x)
        space.CPC[row] = dot(model.C[row], space.Pc[row])
        out.lab_sd[e] = np.sqrt(space.CPC[row] + data.lab_variance[e])
    if not _correct_eight(kernel, P, k, data, out, (lab, stop), space):
        return UNSOUND
    for e in range(kernel.n_estimates):
        row = kernel.n_sensors + e
        out.estimate[k, e] = base[row] + dot(model.C[row], x)
        combine(model.C[row], P, space.v)
        variance = dot(model.C[row], space.v)
        if not variance >= 0.0:
            variance = unless_rounding(kernel, P, row, variance)
            if not variance >= 0.0:
                return UNSOUND
        out.estimate_sd[k, e] = np.sqrt(variance)
    predict_eight(model, x, P, space.v, space.AP, other)
    return stop


@inlined
def _correct_eight(
    kernel: Kernel,
    P: Floats,
    k: int,
    data: BlockInputs,
    out: BlockOutputs,
    labs: tuple[int, int],
    space: WorkSpace,
) -> bool:
    """Sensors in file order, then laboratory results; False where a variance is not positive."""
    x, model, untouched, squares, sensors = space.x, kernel.eight, True, 0.0, kernel.n_sensors
    for j in range(sensors + labs[1] - labs[0]):
        if j < sensors and out.used[k, j] == 0:
            squares += 1.0
            continue
        row, deviation, r = _taken(kernel, k, j, labs[0] + j - sensors, space.base, data)
        c, v = model.C[row], space.Pc[row]
        if not untouched:
            combine(c, P, v)
            space.CPC[row] = dot(c, v)
        s, innovation = space.CPC[row] + r, deviation - dot(c, x)
        if not s > 0.0:
            return False
        correct_eight(x, P, innovation, s, v, space.K)
        if j < sensors:
            squares += min(innovation * innovation / s, MOST_SQUARE)
        untouched = False
    out.squares[k] = squares
    return True
