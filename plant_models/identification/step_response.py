"""Step responses of rational transfer functions with dead time, and responses to recorded moves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Vector = NDArray[np.float64]
_SEPARATION = 3e-4
"""Half the distance, as a share of their size, to which nearly equal poles are moved apart; the error is its square."""


@dataclass(frozen=True, slots=True)
class Structure:
    """Which transfer function is fitted.

    ::

        gain * (1 + b1 s + b2 s^2) / D(s) * exp(-dead_time s)

    D(s) is a product of quadratics 1 + a1 s + a2 s^2, and one lag 1 + a s when the order is odd: stable for any
    positive coefficients, with real or complex poles. ``zeros`` (0 to 2) counts the b, ``order`` (1 to 4) the poles.
    """

    order: int
    zeros: int = 0

    def __post_init__(self) -> None:
        if not 1 <= self.order <= 4 or not 0 <= self.zeros <= min(2, self.order - 1):
            raise ValueError("order 1 to 4, and fewer zeros than poles, at most two")

    @property
    def coefficient_names(self) -> tuple[str, ...]:
        """Names of the fitted coefficients in order: numerator, then denominator."""
        numerator = tuple(f"b{i + 1}" for i in range(self.zeros))
        return numerator + tuple(f"a{i + 1}" for i in range(self.order))

    def denominator_factors(self, coefficients: Vector) -> tuple[Vector, ...]:
        """Factors in descending powers of s from the coefficients a (order,): quadratics, then the lag."""
        factors = [np.array([coefficients[i + 1], coefficients[i], 1.0]) for i in range(0, self.order - 1, 2)]
        if self.order % 2:
            factors.append(np.array([coefficients[-1], 1.0]))
        return tuple(factors)


def separate_poles(factors: tuple[Vector, ...]) -> NDArray[np.complex128]:
    """Poles of a product of polynomials in descending powers, those of nearly equal value spread about their mean."""
    poles = np.concatenate([np.roots(factor) for factor in factors]).astype(np.complex128)
    waiting, groups = list(range(len(poles))), []
    while waiting:
        first = waiting[0]
        near = [i for i in waiting if abs(poles[i] - poles[first]) < 3.0 * _SEPARATION * abs(poles[first])]
        groups.append(near)
        waiting = [i for i in waiting if i not in near]
    for group in groups:
        if len(group) > 1:
            places = 2.0 * np.arange(len(group)) - (len(group) - 1.0)
            poles[group] = np.mean(poles[group]) * (1.0 + _SEPARATION * places)
    return poles


def step_response(time: Vector, numerator: Vector, factors: tuple[Vector, ...], dead_time: float) -> Vector:
    """Response at the times (n,) to a unit step at time zero, unit gain; zero up to the dead time.

    With N(s)/D(s) strictly proper and N(0)/D(0) = 1::

        S(t) = 1 - sum_i r_i exp(p_i (t - dead_time)),   r_i = N(p_i) / prod_j!=i (1 - p_i / p_j)

    :param numerator: descending powers of s, last coefficient 1; the denominator's factors alike.
    """
    poles = separate_poles(factors)
    since = np.maximum(time - dead_time, 0.0)
    response = np.ones_like(since, dtype=np.complex128)
    for i, pole in enumerate(poles):
        slope = np.prod(1.0 - pole / np.delete(poles, i))
        response -= np.polyval(numerator, pole) / slope * np.exp(pole * since)
    return np.where(time > dead_time, response.real, 0.0)


def moves_of(time: Vector, u: Vector) -> list[tuple[float, float]]:
    """The times and sizes of a recorded input's changes; the first value is where the test starts from."""
    changes = np.diff(u)
    return [(float(time[i + 1]), float(changes[i])) for i in np.flatnonzero(changes)]


def response_to_moves(
    time: Vector,
    moves: list[tuple[float, float]],
    numerator: Vector,
    factors: tuple[Vector, ...],
    dead_time: float,
) -> Vector:
    """Response (n,) of the unit-gain transfer function to moves at recorded times, by superposition.

    At evenly spaced times the response is computed once and shifted, which is the bulk of a fit's work.
    """
    total = np.zeros_like(time)
    even = len(time) > 2 and bool(np.ptp(np.diff(time)) < 1e-9 * (time[1] - time[0]))
    unit = step_response(time - time[0], numerator, factors, dead_time) if even else None
    for start, size in moves:
        if unit is None:
            total += size * step_response(time - start, numerator, factors, dead_time)
        else:
            first = int(np.searchsorted(time, start))
            total[first:] += size * unit[: len(time) - first]
    return total
