"""Fitting a transfer function to a step test by least squares, with confidence intervals."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats
from scipy.optimize import OptimizeResult, least_squares

from plant_models.errors import Problem
from plant_models.identification.step_response import Structure, Vector, moves_of, response_to_moves


class StepTestError(Problem):
    """A step test that no transfer function can be taken from."""


DEFAULT_STRUCTURES = (Structure(1), Structure(2), Structure(2, 1))
"""First order, second order, second order with a lead (negative: inverse response), each with dead time."""


@dataclass(frozen=True)
class FittedPath:
    """One fitted transfer function, time in seconds::

    gain * (1 + b1 s + b2 s^2) / prod(factors) * exp(-dead_time s)
    """

    structure: Structure
    gain: float
    numerator: Vector
    """Descending powers of s, last coefficient 1; times the gain it is the numerator."""
    factors: tuple[Vector, ...]
    """Factors of the denominator, descending powers of s, last coefficient 1."""
    dead_time: float
    sds: dict[str, float]
    """Standard deviation of each parameter: gain, dead_time and the structure's coefficient names."""
    values: dict[str, float]
    """Value of each parameter, under the same names."""
    rms_misfit: float
    """Root mean square of the residuals, in the output's unit."""
    rms_response: float
    """Root mean square of the output's movement in the test."""
    degrees_of_freedom: int

    @property
    def denominator(self) -> Vector:
        """The product of the factors, descending powers of s."""
        product = np.array([1.0])
        for factor in self.factors:
            product = np.polymul(product, factor)
        return product

    @property
    def time_constants(self) -> tuple[float, ...] | None:
        """Largest first; None where poles are complex, an underdamped or well-damped oscillation."""
        return _real_constants(self.factors)

    @property
    def lead_times(self) -> tuple[float, ...] | None:
        """Lead times; negative for an inverse response; None where zeros are complex."""
        return _real_constants((self.numerator,)) if len(self.numerator) > 1 else ()

    def confidence_interval(self, name: str, level: float = 0.95) -> tuple[float, float]:
        """Interval of one parameter, from the linearised fit and Student's t."""
        half = float(stats.t.ppf(0.5 + 0.5 * level, self.degrees_of_freedom)) * self.sds[name]
        return self.values[name] - half, self.values[name] + half

    def response(self, time: Vector, u: Vector) -> Vector:
        """Movement of the output that a recorded input causes, by this fit."""
        return self.gain * response_to_moves(
            time, moves_of(time, u), self.numerator, self.factors, self.dead_time
        )


@dataclass(frozen=True)
class FittedPair:
    """One fit with the two ends it connects, and the noise of the output in the test."""

    source: str
    target: str
    path: FittedPath
    noise_sd: float


def _real_constants(factors: tuple[Vector, ...]) -> tuple[float, ...] | None:
    """-1/root of each root where all are real, largest first."""
    roots = np.concatenate([np.roots(factor) for factor in factors])
    if np.any(np.abs(roots.imag) > 1e-9 * np.abs(roots)):
        return None
    return tuple(sorted((float(-1.0 / root.real) for root in roots), reverse=True))


def _unpack(structure: Structure, theta: Vector) -> tuple[float, float, float, Vector, tuple[Vector, ...]]:
    """theta = [level, gain, dead time, b..., log a...] -> level, gain, dead time, numerator, factors."""
    zeros = structure.zeros
    numerator = np.concatenate([theta[3 : 3 + zeros][::-1], [1.0]])
    return theta[0], theta[1], theta[2], numerator, structure.denominator_factors(np.exp(theta[3 + zeros :]))


def _start(structure: Structure, gain: float, scale: float, level: float) -> Vector:
    """A starting point: damped quadratics and a lag around one time scale, no zeros, hardly any dead time."""
    coefficients: list[float] = []
    for i in range(0, structure.order - 1, 2):
        here = scale / (1.0 + 2.0 * i)
        coefficients += [math.log(1.8 * here), math.log(here * here)]
    if structure.order % 2:
        coefficients.append(math.log(scale if structure.order == 1 else 0.3 * scale))
    return np.array([level, gain, 0.02 * scale, *([0.1 * scale] * structure.zeros), *coefficients])


def _longest_hold(time: Vector, moves: list[tuple[float, float]]) -> float:
    """Longest time for which the input stood after a move, seconds."""
    starts = [start for start, _ in moves]
    return max(after - before for before, after in zip(starts, [*starts[1:], float(time[-1])], strict=True))


def _bounds(structure: Structure, hold: float, longest_dead_time: float) -> tuple[Vector, Vector]:
    """No time constant much beyond a third of the time that the input stood: a test cannot show it.

    A quadratic's a2 is a product of two time constants and its a1 their sum.
    """
    size = 3 + structure.zeros + structure.order
    lower, upper = np.full(size, -np.inf), np.full(size, np.inf)
    lower[2], upper[2] = 0.0, longest_dead_time
    first = 3 + structure.zeros
    longest = math.log(hold / 3.0)
    lower[first:], upper[first:] = math.log(0.1), longest + math.log(2.0)
    for i in range(1, structure.order, 2):
        lower[first + i], upper[first + i] = math.log(0.01), 2.0 * longest
    return lower, upper


def _fit(
    test: tuple[Vector, Vector, Vector], structure: Structure, scale: float, longest_dead_time: float | None
) -> OptimizeResult:
    """Least squares from one starting point; the gain and level start from the best linear fit to it."""
    time, u, y = test
    moves = moves_of(time, u)
    hold = _longest_hold(time, moves)
    longest = 0.5 * hold if longest_dead_time is None else longest_dead_time
    theta = _start(structure, 1.0, scale, float(y[0]))
    theta[2] = min(theta[2], 0.5 * longest)

    def residuals(theta: Vector) -> Vector:
        level, gain, dead_time, numerator, factors = _unpack(structure, theta)
        return level + gain * response_to_moves(time, moves, numerator, factors, dead_time) - y

    _, _, dead_time, numerator, factors = _unpack(structure, theta)
    unit = response_to_moves(time, moves, numerator, factors, dead_time)
    theta[:2] = np.linalg.lstsq(np.column_stack([np.ones_like(unit), unit]), y, rcond=None)[0]
    lower, upper = _bounds(structure, hold, longest)
    sizes = np.concatenate(
        [
            [max(float(np.std(y)), 1e-12), max(abs(theta[1]), 1e-12), scale],
            [scale ** (i + 1) for i in range(structure.zeros)],
            np.ones(structure.order),
        ]
    )
    return least_squares(residuals, theta, bounds=(lower, upper), x_scale=sizes, max_nfev=200)


def _fitted(structure: Structure, result: OptimizeResult, time: Vector, u: Vector, y: Vector) -> FittedPath:
    _, gain, dead_time, numerator, factors = _unpack(structure, result.x)
    freedom = len(y) - len(result.x)
    variance = float(result.fun @ result.fun) / freedom
    # Columns to one length first, so that the pseudo-inverse leaves out only what the test says nothing of.
    lengths = np.linalg.norm(result.jac, axis=0)
    lengths[lengths == 0.0] = 1.0
    scaled = result.jac / lengths
    covariance = variance * np.linalg.pinv(scaled.T @ scaled, hermitian=True)
    spread = np.sqrt(np.diag(covariance)) / lengths
    names = ("gain", "dead_time", *structure.coefficient_names)
    values = [gain, dead_time, *result.x[3 : 3 + structure.zeros], *np.exp(result.x[3 + structure.zeros :])]
    slopes = [1.0] * (2 + structure.zeros) + [float(v) for v in np.exp(result.x[3 + structure.zeros :])]
    response = gain * response_to_moves(time, moves_of(time, u), numerator, factors, dead_time)
    return FittedPath(
        structure=structure,
        gain=float(gain),
        numerator=numerator,
        factors=factors,
        dead_time=float(dead_time),
        sds={name: float(slope * sd) for name, slope, sd in zip(names, slopes, spread[1:], strict=True)},
        values={name: float(value) for name, value in zip(names, values, strict=True)},
        rms_misfit=math.sqrt(float(result.fun @ result.fun) / len(y)),
        rms_response=float(np.sqrt(np.mean(response**2))),
        degrees_of_freedom=freedom,
    )


def fit_step_response(
    time_s: Sequence[float] | Vector,
    u: Sequence[float] | Vector,
    y: Sequence[float] | Vector,
    structures: Sequence[Structure] = DEFAULT_STRUCTURES,
    longest_dead_time: float | None = None,
    scales: Sequence[float] | None = None,
) -> FittedPath:
    """Fit each structure to a step test and keep the one with the lowest Bayesian information criterion.

    :param time_s: seconds, rising (n,). :param u: the input as it was moved, constant between moves (n,).
    :param y: the output (n,).
    :param longest_dead_time: seconds, above zero; default: half the time that the input stood.
    :param scales: starting time scales in seconds; default: a tenth and a fiftieth of the test.
    :raises StepTestError: arrays that do not fit together, values that are not finite, an input that never moved.

    >>> import numpy as np
    >>> t = np.arange(0.0, 3000.0, 10.0)
    >>> y = np.where(t > 130.0, 2.0 * (1.0 - np.exp(-(t - 130.0) / 300.0)), 0.0)
    >>> fit = fit_step_response(t, (t >= 100.0) * 1.0, y, [Structure(1)])
    >>> [round(v, 3) for v in (fit.gain, fit.dead_time, fit.values["a1"])]
    [2.0, 30.0, 300.0]
    """
    time, moved, output = (np.asarray(column, dtype=np.float64) for column in (time_s, u, y))
    _check(time, moved, output)
    span = float(time[-1] - time[0])
    best: tuple[float, Structure, OptimizeResult] | None = None
    for structure in structures:
        for scale in (0.1 * span, 0.02 * span) if scales is None else scales:
            result = _fit((time, moved, output), structure, scale, longest_dead_time)
            mean_square = max(2.0 * float(result.cost) / len(output), 1e-300)
            criterion = len(output) * math.log(mean_square) + len(result.x) * math.log(len(output))
            if best is None or criterion < best[0]:
                best = (criterion, structure, result)
    if best is None:
        raise StepTestError("step test: no structure was given to fit")
    return _fitted(best[1], best[2], time, moved, output)


def _check(time: Vector, u: Vector, y: Vector) -> None:
    if not time.shape == u.shape == y.shape or time.ndim != 1:
        raise StepTestError("step test: time, input and output must be columns of one length")
    if len(time) < 20:
        raise StepTestError(f"step test: {len(time)} rows are too few, at least 20 are needed")
    if not (np.isfinite(time).all() and np.isfinite(u).all() and np.isfinite(y).all()):
        raise StepTestError("step test: every value must be finite")
    if not (np.diff(time) > 0.0).all():
        raise StepTestError("step test: times must rise")
    if not np.any(np.diff(u)):
        raise StepTestError("step test: the input never moved")
