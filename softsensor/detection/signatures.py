"""What each fault or disturbance would leave in the innovations: the signatures that the diagnosis compares.

An additive signal f(k) on the sensors (a bias, a ramp, a disturbance's response, an input instrument's error seen
through its transfer functions) passes through the steady filter; what remains is its signature::

    e(k) = f(k) - C xi(k),   xi(k+1) = A (xi(k) + K e(k))

Source: Willsky & Jones, A generalized likelihood ratio approach, IEEE Trans. AC-21 (1976) 108-112. Own loops, no BLAS,
so that the same discretised model has the same signatures on every machine.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np
from numba import njit

from plant_models.plant_model import PlantModel
from plant_models.specification import Range
from softsensor.estimation.input_driven import accept_inputs, advance_input_driven, input_driven_outputs
from softsensor.estimation.kalman import correct, predict, row_covariance, row_mean
from softsensor.estimation.kernel import EstimatorState, Floats, Ints, Kernel, initial_state

Source = Literal["sensor", "input", "disturbance", "gain"]
Shape = Literal["step", "ramp"]

SETTLE_CYCLES = 50_000
SETTLE_TOLERANCE = 1e-9
"""The filter has settled once no innovation's variance changes by more than this share from one cycle to the next, or
after so many cycles: offsets of estimates that no sensor sees never settle, and do not matter here."""
SETTLED_SHARE = 0.02
"""Signatures are those of the settled filter: innovations count in the diagnosis once their variance is so near to it."""


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """One explanation: which instrument or disturbance, and the shape of its error over time."""

    source: Source
    index: int
    name: str
    shape: Shape
    prior_sd: float
    """Of the size: engineering units for a step, engineering units per cycle for a ramp."""


class SteadyFilter(NamedTuple):
    """Gains and innovation covariance of the settled filter with some sensors in use.

    gains (n_sensors, n): the sequential scalar gains, zero for a sensor that is left out; whitening (n_sensors,
    n_sensors): inverse of the lower Cholesky factor of the innovation covariance of the sensors in use, zero elsewhere.
    """

    gains: Floats
    whitening: Floats
    sd: Floats
    """Standard deviation of each innovation; 1 for a sensor that is left out."""
    settled: bool


@njit(cache=True)
def _settle(kernel: Kernel, P: Floats, use: Ints, cycles: int, tolerance: float) -> bool:
    n = len(kernel.q)
    v, K, x, M = np.zeros(n), np.zeros(n), np.zeros(n), np.zeros((n, n))
    before = np.zeros(kernel.n_sensors)
    for _ in range(cycles):
        change = 0.0
        for i in range(kernel.n_sensors):
            variance = row_covariance(kernel, P, i, v) + kernel.r[i]
            change = max(change, abs(variance - before[i]) / variance)
            before[i] = variance
        if change < tolerance:
            return True
        for i in range(kernel.n_sensors):
            if use[i] != 0 and not correct(kernel, x, P, i, 0.0, kernel.r[i], v, K):
                return False
        predict(kernel, x, P, v, M)
    return False


@njit(cache=True)
def _innovation_covariance(kernel: Kernel, P: Floats, use: Ints) -> Floats:
    n, m = len(kernel.q), kernel.n_sensors
    S, v = np.zeros((m, m)), np.zeros(n)
    for i in range(m):
        if use[i] == 0:
            continue
        S[i, i] = row_covariance(kernel, P, i, v) + kernel.r[i]
        for j in range(i):
            if use[j] != 0:
                S[i, j] = row_mean(kernel, v, j)
                S[j, i] = S[i, j]
    return S


@njit(cache=True)
def inverse_cholesky(S: Floats, use: Ints) -> Floats:
    """Inverse of the lower Cholesky factor over the rows in use; zero rows and columns elsewhere."""
    m = S.shape[0]
    L, inverse = np.zeros((m, m)), np.zeros((m, m))
    for i in range(m):
        if use[i] == 0:
            continue
        for j in range(i + 1):
            if use[j] == 0:
                continue
            total = S[i, j]
            for k in range(j):
                total -= L[i, k] * L[j, k]
            L[i, j] = np.sqrt(total) if i == j else total / L[j, j]
        inverse[i, i] = 1.0 / L[i, i]
        for j in range(i):
            total = 0.0
            for k in range(j, i):
                total += L[i, k] * inverse[k, j]
            inverse[i, j] = -total * inverse[i, i]
    return inverse


@njit(cache=True)
def _gains(kernel: Kernel, P: Floats, use: Ints) -> Floats:
    n = len(kernel.q)
    gains, v, x = np.zeros((kernel.n_sensors, n)), np.zeros(n), np.zeros(n)
    for i in range(kernel.n_sensors):
        if use[i] != 0:
            correct(kernel, x, P, i, 0.0, kernel.r[i], v, gains[i])
    return gains


def steady_filter(model: PlantModel, kernel: Kernel, use: Ints) -> SteadyFilter:
    """The filter after it has settled with the sensors marked in ``use`` (n_sensors,)."""
    P = initial_state(model, kernel).P
    settled = bool(_settle(kernel, P, use, SETTLE_CYCLES, SETTLE_TOLERANCE))
    S = _innovation_covariance(kernel, P, use)
    sd = np.sqrt(np.where(use != 0, np.diag(S), 1.0))
    return SteadyFilter(_gains(kernel, P.copy(), use), inverse_cholesky(S, use), sd, settled)


@njit(cache=True)
def _cycles_until(kernel: Kernel, P: Floats, sd: Floats, share: float, most: int) -> int:
    n = len(kernel.q)
    v, K, x, M = np.zeros(n), np.zeros(n), np.zeros(n), np.zeros((n, n))
    for k in range(most):
        settled = True
        for i in range(kernel.n_sensors):
            variance = row_covariance(kernel, P, i, v) + kernel.r[i]
            if abs(variance / (sd[i] * sd[i]) - 1.0) > share:
                settled = False
        if settled:
            return k
        for i in range(kernel.n_sensors):
            correct(kernel, x, P, i, 0.0, kernel.r[i], v, K)
        predict(kernel, x, P, v, M)
    return most


def cycles_to_settle(model: PlantModel, kernel: Kernel, steady: SteadyFilter, most: int) -> int:
    """Cycles from the start until every innovation's variance is within SETTLED_SHARE of the settled filter's."""
    start = initial_state(model, kernel).P
    return int(_cycles_until(kernel, start, steady.sd, SETTLED_SHARE, most))


@njit(cache=True)
def filter_response(kernel: Kernel, gains: Floats, use: Ints, signal: Floats) -> Floats:
    """Innovations (window, n_sensors) that the signal (window, n_sensors) leaves; a sensor left out shows none."""
    n, m = len(kernel.q), kernel.n_sensors
    out = np.zeros_like(signal)
    x, v = np.zeros(n), np.zeros(n)
    for k in range(signal.shape[0]):
        for i in range(m):
            if use[i] != 0:
                out[k, i] = signal[k, i] - row_mean(kernel, x, i)
        for i in range(m):
            if use[i] != 0:
                rest = signal[k, i] - row_mean(kernel, x, i)
                for j in range(n):
                    x[j] += gains[i, j] * rest
        for i in range(n):
            total = 0.0
            for e in range(kernel.a_ptr[i], kernel.a_ptr[i + 1]):
                total += kernel.a_val[e] * x[kernel.a_idx[e]]
            v[i] = total
        x[:] = v
    return out


@njit(cache=True)
def disturbance_signal(kernel: Kernel, state_index: int, window: int) -> Floats:
    """Sensor responses (window, n_sensors) to a unit jump of one disturbance that then takes its own course."""
    n = len(kernel.q)
    out = np.zeros((window, kernel.n_sensors))
    x, v = np.zeros(n), np.zeros(n)
    x[state_index] = 1.0
    for k in range(window):
        for i in range(kernel.n_sensors):
            out[k, i] = row_mean(kernel, x, i)
        for i in range(n):
            total = 0.0
            for e in range(kernel.a_ptr[i], kernel.a_ptr[i + 1]):
                total += kernel.a_val[e] * x[kernel.a_idx[e]]
            v[i] = total
        x[:] = v
    return out


@njit(cache=True)
def input_error_signal(kernel: Kernel, state: EstimatorState, index: int, window: int) -> Floats:
    """Error of the sensors' predictions, sign turned, when one input's instrument reads one unit too high."""
    out, row = np.zeros((window, kernel.n_sensors)), np.zeros(kernel.n_sensors + kernel.n_estimates)
    work = np.zeros(len(kernel.steady) + 1)
    u = kernel.operating_u.copy()
    accept_inputs(kernel, state, u)
    u[index] += 1.0
    for k in range(window):
        accept_inputs(kernel, state, u)
        input_driven_outputs(kernel, state, row)
        for i in range(kernel.n_sensors):
            out[k, i] = kernel.operating_y[i] - row[i]
        advance_input_driven(kernel, state, work)
    return out


def _width(limits: Range) -> float:
    return limits[1] - limits[0]


def _sizes(model: PlantModel, window: int) -> list[tuple[Source, int, str, float]]:
    """Every suspect with a plausible size of its error: three tolerances, three sd, a tenth of an input's working range."""
    hours = window * model.spec.sample_time / 3600.0
    suspects: list[tuple[Source, int, str, float]] = [
        ("sensor", i, item.tag, 3.0 * item.tolerance) for i, item in enumerate(model.scaled.sensors)
    ]
    suspects += [
        (
            "input",
            i,
            item.tag,
            0.1 * _width(item.validated_range) if item.validated_range else 0.03 * _width(item.range),
        )
        for i, item in enumerate(model.scaled.inputs)
    ]
    for i, item in enumerate(model.spec.disturbances):
        walk = (item.initial_sd**2 + (item.walk_sd or 0.0) ** 2 * hours) ** 0.5
        suspects.append(("disturbance", i, item.name, 3.0 * (item.sd if item.sd is not None else walk)))
    return suspects


def hypotheses(model: PlantModel, window: int) -> tuple[Hypothesis, ...]:
    """Step and ramp of every sensor, every input's instrument and every disturbance."""
    return tuple(
        Hypothesis(source, index, name, shape, size if shape == "step" else 4.0 * size / window)
        for source, index, name, size in _sizes(model, window)
        for shape in ("step", "ramp")
    )


def signal_of(model: PlantModel, kernel: Kernel, hypothesis: Hypothesis, window: int) -> Floats:
    """(window, n_sensors) what a unit-sized error adds to each sensor's reading, or takes from its prediction."""
    if hypothesis.source == "sensor":
        step = np.zeros((window, kernel.n_sensors))
        step[:, hypothesis.index] = 1.0
    elif hypothesis.source == "disturbance":
        step = disturbance_signal(kernel, model.stochastic.disturbance_index[hypothesis.index], window)
    else:
        step = input_error_signal(kernel, initial_state(model, kernel), hypothesis.index, window)
    return step if hypothesis.shape == "step" else np.cumsum(step, axis=0)


def signatures(
    model: PlantModel,
    kernel: Kernel,
    suspects: tuple[Hypothesis, ...],
    steady: SteadyFilter,
    use: Ints,
    window: int,
) -> Floats:
    """Whitened signatures of unit size, shape (hypotheses, window, n_sensors)."""
    out = np.zeros((len(suspects), window, kernel.n_sensors))
    for h, suspect in enumerate(suspects):
        if suspect.source == "sensor" and use[suspect.index] == 0:
            continue
        left = filter_response(kernel, steady.gains, use, signal_of(model, kernel, suspect, window))
        whiten(steady.whitening, left, out[h])
    return out


@njit(cache=True)
def whiten(whitening: Floats, rows: Floats, out: Floats) -> None:
    """Every row times the whitening matrix, into ``out``."""
    for k in range(rows.shape[0]):
        for i in range(rows.shape[1]):
            total = 0.0
            for j in range(i + 1):
                total += whitening[i, j] * rows[k, j]
            out[k, i] = total
