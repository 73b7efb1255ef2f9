"""Average run length of the cumulative-sum test, exactly, and the decision interval that keeps a promise.

One side of the test, on standardised values x ~ N(shift, 1), clipped to [-clip, clip] where a clip is given::

    S <- max(0, S + x - k),   a flag when S > h          k reference value, h decision interval

From a sum s the test either falls to zero or passes h first. With K(s, t) the density of going from s to t
inside (0, h], b(s) the chance of passing h in one step, tau the mean time until one of the two and p the
chance of passing h::

    tau = 1 + K tau,    p = b + K p,    L(0) = tau(0) / p(0),    L(s) = tau(s) + (1 - p(s)) L(0)

This is the integral equation of Page (1954) with the return to zero taken out. The usual form is singular
to double precision beyond run lengths of about 1e15; here every term is positive and I - K stays well
conditioned, so run lengths keep their digits at any size. Without a clip the kernel is smooth:
Gauss-Legendre nodes. With a clip the values have atoms at both ends, so tau and p jump: panels between the
jumps, polynomials inside each, atoms exact.

Two sides combine as 1/L = 1/L+ + 1/L- (van Dobben de Bruyn 1968), head starts as in Lucas & Crosier (1982).
Run lengths and times are in cycles, sums and shifts in standard deviations.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve, solve_banded
from scipy.optimize import brentq
from scipy.special import ndtr, roots_legendre

from plant_models.errors import Problem

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]

_NODES_PER_PANEL = 12
_WIDEST_PANEL = 3.0
_MOST_EDGES = 500
_NEGLIGIBLE_JUMP = 1e-13
_LARGEST_INTERVAL = 1000.0
_LONGEST_CLIPPED = 1e10
_LEAST_RATE = 1e-290
_ROUNDING = 1e-9
"""Polynomials may undershoot by this much beside a jump; probabilities of zero come out as small as this."""
_SQRT_TWO_PI = math.sqrt(2.0 * math.pi)


class RunLengthError(Problem):
    """A run length or decision interval that does not exist, or that double precision cannot give."""


@dataclass(frozen=True, slots=True)
class _Excursions:
    """The discretised equation. ``step[i, j]``: from state i into node j; ``passing[i]``: from state i
    past h.

    State 0 is a sum of zero, state i > 0 is node i; the head start, if any, is the last row of both.
    """

    step: Matrix
    passing: Vector


def average_run_length(
    reference: float,
    interval: float,
    shift: float = 0.0,
    two_sided: bool = True,
    head_start: float = 0.0,
    clip: float | None = None,
) -> float:
    """Mean number of cycles until a flag, on independent N(shift, 1) values.

    >>> round(average_run_length(0.5, 4.0), 4)
    167.6838
    >>> round(average_run_length(0.5, 4.0, shift=1.0, two_sided=False), 4)
    8.3832

    :param reference: reference value k >= 0, in standard deviations.
    :param interval: decision interval h > 0.
    :param shift: mean of the values; the one-sided test is the upper one.
    :param head_start: start of the sums; at most half of the interval when two-sided.
    :param clip: values are clipped to [-clip, clip] before they are summed; None for no clipping.
    :raises RunLengthError: bad settings, or a run length beyond double precision.
    """
    _check(reference, interval, shift, head_start, clip)
    upper = _side(reference, interval, shift, head_start, clip)
    if not two_sided:
        return _trusted(upper.rate, 1.0 + upper.gained, clip)
    if head_start > 0.5 * interval:
        raise RunLengthError(
            f"a two-sided head start of {head_start:g} exceeds half of the interval {interval:g}"
        )
    lower = _side(reference, interval, -shift, head_start, clip)
    # Lucas & Crosier: L = (L+(s) L-(0) + L-(s) L+(0) - L+(0) L-(0)) / (L+(0) + L-(0))
    return _trusted(upper.rate + lower.rate, 1.0 + upper.gained + lower.gained, clip)


def decision_interval(
    reference: float, run_length: float, two_sided: bool = True, clip: float | None = None
) -> float:
    """The decision interval whose average run length without a shift is ``run_length`` cycles.

    With a clip the run length jumps where a whole number of clipped values just passes the interval; where
    the wanted one lies inside such a jump the smallest interval that keeps the promise is returned.

    >>> round(decision_interval(0.5, 370.0), 4)
    4.7738

    :raises RunLengthError: no such interval, or bad settings.
    """
    _check(reference, 1.0, 0.0, 0.0, clip)
    if not (math.isfinite(run_length) and run_length > 0.0):
        raise RunLengthError(f"a run length must be a positive number of cycles, not {run_length:g}")
    _trusted(1.0 / run_length, 1.0, clip)
    return _decision_interval(float(reference), float(run_length), two_sided, clip)


def interval_with_head_start(reference: float, run_length: float, clip: float | None = None) -> float:
    """The two-sided decision interval whose average run length, begun at half of itself, is ``run_length`` cycles.

    Half the interval as head start finds a shift that is there from the first cycle sooner (Lucas & Crosier 1982). The
    run is then shorter by a share that hardly depends on the interval: one correction is enough, and errs upwards.

    >>> h = interval_with_head_start(0.5, 43200.0, clip=4.0)
    >>> round(h - decision_interval(0.5, 43200.0, clip=4.0), 3)
    0.009

    :raises RunLengthError: as ``decision_interval``.
    """
    plain = decision_interval(reference, run_length, clip=clip)
    from_zero = average_run_length(reference, plain, clip=clip)
    share = average_run_length(reference, plain, head_start=0.5 * plain, clip=clip) / from_zero
    return decision_interval(reference, run_length / share, clip=clip)


@lru_cache(maxsize=512)
def _decision_interval(reference: float, run_length: float, two_sided: bool, clip: float | None) -> float:
    target = math.log(run_length * (2.0 if two_sided else 1.0))

    def excess(h: float) -> float:
        return -math.log(max(_side(reference, h, 0.0, 0.0, clip).rate, _LEAST_RATE)) - target

    shortest = 1e-8
    if excess(shortest) >= 0.0:
        raise RunLengthError(
            f"a run length of {run_length:g} is shorter than the test's shortest with "
            f"reference value {reference:g}"
        )
    start, span = _siegmund_interval(reference, math.exp(target)), 0.05 + 0.5 * reference
    low, high = max(shortest, start - span), start + span
    while high <= _LARGEST_INTERVAL and excess(high) < 0.0:
        low, high, span = high, high + 2.0 * span, 2.0 * span
    if high > _LARGEST_INTERVAL:
        raise RunLengthError(f"no decision interval up to {_LARGEST_INTERVAL:g} gives {run_length:g} cycles")
    while excess(low) > 0.0:
        low, high, span = max(shortest, low - 2.0 * span), low, 2.0 * span
    root = float(brentq(excess, low, high, xtol=1e-9, rtol=1e-14))
    step = 1e-9
    while excess(root) < -1e-9:
        root += step
        step *= 2.0
    return root


def steady_state_delay(reference: float, interval: float, shift: float, clip: float | None = None) -> float:
    """Mean number of cycles from a shift to the flag, one-sided, when the test had long been running
    without one.

    The sums then start from the distribution that they settle to before any flag (the quasi-stationary
    one) instead of from zero. Under a shift worth finding the other side of a two-sided test adds nothing
    to it.

    >>> round(steady_state_delay(0.5, 5.0, 1.0), 3)
    9.65

    :raises RunLengthError: as ``average_run_length``.
    """
    _check(reference, interval, shift, 0.0, clip)
    quiet = _excursions(reference, interval, 0.0, 0.0, clip)
    nodes = quiet.step.shape[1]
    chain = np.empty((nodes + 1, nodes + 1))
    chain[:, 1:] = quiet.step[: nodes + 1]
    chain[:, 0] = 1.0 - quiet.passing[: nodes + 1] - quiet.step[: nodes + 1].sum(axis=1)
    mass = np.zeros(nodes + 1)
    mass[0] = 1.0
    power = chain / chain.max()
    for _ in range(60):
        settled = mass @ power
        settled /= settled.sum()
        if np.abs(settled - mass).max() < 1e-13:
            break
        mass = settled
        power = power @ power
        power /= np.abs(power).max()
    else:
        raise RunLengthError("the sums' distribution without a shift did not settle")
    tau, passing = _solve(_excursions(reference, interval, shift, 0.0, clip))
    from_zero = tau[0] / passing[0]
    lengths = tau + (1.0 - passing) * from_zero
    return float(settled @ lengths[: nodes + 1])


def _check(reference: float, interval: float, shift: float, head_start: float, clip: float | None) -> None:
    if not (math.isfinite(reference) and reference >= 0.0):
        raise RunLengthError(f"a reference value must be a number from zero up, not {reference:g}")
    if not (math.isfinite(interval) and 0.0 < interval <= _LARGEST_INTERVAL):
        raise RunLengthError(
            f"a decision interval must lie between 0 and {_LARGEST_INTERVAL:g}, not {interval:g}"
        )
    if not math.isfinite(shift):
        raise RunLengthError(f"a shift must be a finite number, not {shift:g}")
    if not 0.0 <= head_start < interval:
        raise RunLengthError(f"a head start must lie in [0, {interval:g}), not {head_start:g}")
    if clip is not None and not (math.isfinite(clip) and clip > reference):
        raise RunLengthError(
            f"a clip of {clip:g} leaves a sum with reference value {reference:g} no way up: it must be larger"
        )


def _trusted(rate: float, factor: float, clip: float | None) -> float:
    """The run length factor / rate, or an error where it has lost its digits."""
    if clip is not None and rate < 1.0 / _LONGEST_CLIPPED:
        raise RunLengthError(
            f"a run length of more than {_LONGEST_CLIPPED:.0e} cycles with clipped "
            f"values is beyond what can be "
            "computed to six digits"
        )
    if rate <= _LEAST_RATE:
        raise RunLengthError("the run length at these settings is beyond double precision")
    return factor / rate


def _siegmund_interval(reference: float, run_length: float) -> float:
    """Siegmund's closed approximation (1985) solved for the interval, one-sided, no shift; only to start a
    search.
    """
    if reference == 0.0:
        return max(0.0, math.sqrt(run_length) - 1.166)
    low, high = 0.0, 1.0

    def log_length(b: float) -> float:
        exponent = 2.0 * reference * b
        if exponent < 1e-3:
            return 2.0 * math.log(b)
        if exponent > 50.0:
            return exponent - math.log(2.0 * reference**2)
        return math.log((math.expm1(exponent) - exponent) / (2.0 * reference**2))

    while log_length(high) < math.log(run_length):
        low, high = high, 2.0 * high
    for _ in range(40):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if log_length(middle) < math.log(run_length) else (low, middle)
    return max(0.0, high - 1.166)


class _Side(NamedTuple):
    """One side of the test: 1 / L(0), and L(head start) / L(0) - 1."""

    rate: float
    gained: float


def _side(k: float, h: float, shift: float, head: float, clip: float | None) -> _Side:
    """The upper test. A rate of zero: too small for double precision."""
    tau, passing = _solve(_excursions(k, h, shift, head, clip))
    rate = max(0.0, float(passing[0] / tau[0]))
    return _Side(rate, float(tau[-1] * rate - passing[-1]) if head > 0.0 else 0.0)


def _solve(excursions: _Excursions) -> tuple[Vector, Vector]:
    """tau and p at zero, at the nodes and at the head start (last)."""
    nodes = excursions.step.shape[1]
    inner = excursions.step[1 : nodes + 1]
    right = np.column_stack((np.ones(nodes), excursions.passing[1 : nodes + 1]))
    at_nodes = _solve_linear(np.eye(nodes) - inner, right)
    everywhere = excursions.step @ at_nodes
    tau, passing = 1.0 + everywhere[:, 0], excursions.passing + everywhere[:, 1]
    if not (np.all(np.isfinite(tau)) and np.all(tau >= 1.0 - _ROUNDING) and np.all(passing >= -_ROUNDING)):
        raise RunLengthError(
            "the run-length equation has no sound solution in double precision at these settings"
        )
    return tau, passing


def _solve_linear(matrix: Matrix, right: Matrix) -> Matrix:
    """Solve ``matrix`` x = ``right``; as a band where the kernel's reach is short against the interval."""
    size = matrix.shape[0]
    filled = matrix != 0.0
    places = np.arange(size)
    below = int((places - filled.argmax(axis=1)).max())
    above = int((size - 1 - filled[:, ::-1].argmax(axis=1) - places).max())
    solution: Matrix
    if 4 * max(below, above) > size:
        solution = solve(matrix, right, check_finite=False)
        return solution
    bands = np.zeros((below + above + 1, size))
    for offset in range(-below, above + 1):
        diagonal = matrix.diagonal(offset)
        start = max(offset, 0)
        bands[above - offset, start : start + diagonal.size] = diagonal
    solution = solve_banded((below, above), bands, right, check_finite=False)
    return solution


def _excursions(k: float, h: float, shift: float, head: float, clip: float | None) -> _Excursions:
    return _smooth(k, h, shift, head) if clip is None else _clipped(k, h, shift, head, clip)


def _smooth(k: float, h: float, shift: float, head: float) -> _Excursions:
    """Without a clip: K(s, t) = phi(t - s + k - shift) on Gauss-Legendre nodes, spaced below 0.8 sd at the
    widest.
    """
    nodes, weights = _legendre(math.ceil((24.0 + 2.0 * h) / 8.0) * 8)
    nodes, weights = 0.5 * h * (nodes + 1.0), 0.5 * h * weights
    starts = np.concatenate(([0.0], nodes, [head]))
    x = nodes[None, :] - starts[:, None] + (k - shift)
    step = np.exp(-0.5 * x * x) * (weights / _SQRT_TWO_PI)
    return _Excursions(step, ndtr(starts + (shift - k - h)))


def _clipped(k: float, h: float, shift: float, head: float, clip: float) -> _Excursions:
    """With a clip: polynomials on panels between the jumps, the density cut at +-clip, an atom at either
    end.
    """
    up, down = clip - k, clip + k
    atom_up, atom_down = float(ndtr(shift - clip)), float(ndtr(-clip - shift))
    edges = _panel_edges(h, up, down, atom_up, atom_down)
    unit, unit_weights = _legendre(_NODES_PER_PANEL)
    half = 0.5 * np.diff(edges)
    nodes = (edges[:-1, None] + half[:, None] * (unit + 1.0)).ravel()
    starts = np.concatenate(([0.0], nodes, [head]))
    lower = np.maximum(edges[None, :-1], starts[:, None] - down)
    upper = np.minimum(edges[None, 1:], starts[:, None] + up)
    row, panel = np.nonzero(upper > lower)
    middle, reach = 0.5 * (upper + lower)[row, panel], 0.5 * (upper - lower)[row, panel]
    t = middle[:, None] + reach[:, None] * unit
    x = t - starts[row, None] + (k - shift)
    density = np.exp(-0.5 * x * x) * (reach[:, None] * unit_weights / _SQRT_TWO_PI)
    basis = _lagrange((t - edges[panel, None]) / half[panel, None] - 1.0)
    step = np.zeros((starts.size, half.size, _NODES_PER_PANEL))
    step[row, panel] = np.einsum("ij,ijk->ik", density, basis)
    for jump, atom in ((up, atom_up), (-down, atom_down)):
        landing = starts + jump
        inside = np.nonzero((landing > 0.0) & (landing <= h))[0]
        where = np.clip(np.searchsorted(edges, landing[inside], side="left") - 1, 0, half.size - 1)
        step[inside, where] += atom * _lagrange((landing[inside] - edges[where]) / half[where] - 1.0)
    needed = h + k - starts
    passing = np.where(needed < clip, ndtr(shift - np.maximum(needed, -clip)), 0.0)
    return _Excursions(step.reshape(starts.size, -1), np.where(needed < -clip, 1.0, passing))


def _panel_edges(h: float, up: float, down: float, atom_up: float, atom_down: float) -> Vector:
    """Ends of the panels: zero, h, and where p and tau jump or kink because an atom lands on such a point.

    A jump passes on to where an atom reaches it from, weakened by the atom's size, until it is negligible.
    """
    weights = {0.0: 1.0, h: 1.0}
    waiting = [0.0, h]
    while waiting and len(weights) < _MOST_EDGES:
        point = waiting.pop(0)
        for reached, atom in ((point - up, atom_up), (point + down, atom_down)):
            weight = weights[point] * max(atom, 1e-4)
            if 0.0 < reached < h and weight >= _NEGLIGIBLE_JUMP and reached not in weights:
                weights[reached] = weight
                waiting.append(reached)
    points = weights.keys()
    edges = np.array(sorted(points))
    edges = edges[np.concatenate(([True], np.diff(edges) > 1e-10))]
    edges[-1] = h
    pieces = [np.linspace(a, b, math.ceil((b - a) / _WIDEST_PANEL) + 1)[:-1] for a, b in pairwise(edges)]
    return np.concatenate([*pieces, [h]])


@lru_cache(maxsize=256)
def _legendre(count: int) -> tuple[Vector, Vector]:
    nodes, weights = roots_legendre(count)
    return np.asarray(nodes, dtype=np.float64), np.asarray(weights, dtype=np.float64)


def _lagrange(points: Vector) -> Vector:
    """Values at ``points`` (in [-1, 1], any shape) of the Lagrange polynomials of a panel's Legendre nodes
    (last axis).

    By the discrete orthogonality of Gauss-Legendre: l_j(x) = w_j sum_n (n + 1/2) P_n(x_j) P_n(x).
    """
    nodes, weights = _legendre(_NODES_PER_PANEL)
    order = _NODES_PER_PANEL - 1
    scale = np.arange(order + 1) + 0.5
    at_nodes = np.polynomial.legendre.legvander(nodes, order) * weights[:, None] * scale
    return np.asarray(np.polynomial.legendre.legvander(points, order) @ at_nodes.T, dtype=np.float64)
