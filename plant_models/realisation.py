"""One path as a continuous state space: x' = A x + B u, y = C x + D u, dead time apart.

Every path is built on its own, from first-order sections where it can be, so that no state is shared,
nothing has to be reduced, and the matrices are well scaled for seconds and for hours. An integrator is always
the last state: its derivative is what the lags put out, and it is the only state that reaches the output. So
an integrating path whose integrating state is zero contributes nothing but its direct term, however its lags
were realised.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from plant_models.errors import RealisationError
from plant_models.specification import PathSpec
from plant_models.transfer_function import Polynomials, faults, poles, polynomials

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]


@dataclass(frozen=True)
class Realisation:
    """x' = A x + B u, y = C x + D u for one input and one output; time in seconds.

    Shapes: A (n, n); B, C (n,); D a number. n is zero for a static gain. When ``integrating``, the last state
    is the integrator: the last column of A is zero.
    """

    A: Matrix
    B: Vector
    C: Vector
    D: float
    integrating: bool

    @property
    def order(self) -> int:
        return int(self.B.size)

    def steady(self) -> Vector:
        """(n,) the state that a constant unit input leads to, -A^{-1} B; zero for the integrating state."""
        state = np.zeros(self.order)
        stable = self.order - self.integrating
        if stable:
            state[:stable] = np.linalg.solve(-self.A[:stable, :stable], self.B[:stable])
        return state


class _System(NamedTuple):
    """A realisation under construction."""

    A: Matrix
    B: Vector
    C: Vector
    D: float


def realise(path: PathSpec) -> Realisation:
    """The state space of one path, dead time apart.

    :raises RealisationError: if the path is improper, unstable, integrates more than once or is not finite.
    """
    found = faults(path)
    if found:
        raise RealisationError(*found)
    if path.schedule is not None:
        system, integrating = _as_written(path), path.integrating
    elif path.numerator is None:
        system, integrating = _factored(path), path.integrating
    else:
        system, integrating = _polynomial(path)
    return Realisation(system.A, system.B, system.C, float(system.D) + 0.0, integrating)


def _factored(path: PathSpec) -> _System:
    """A cascade of first-order sections, the gain in C and D, an integrator at its end.

    Leads and lags are paired by size. One lead more than there are lags is allowed before an integrator.
    """
    gain = float(path.gain or 0.0)
    lags = sorted((lag for lag in path.time_constants if lag != 0.0), reverse=True)
    leads = sorted((lead for lead in path.lead_times if lead != 0.0), key=abs, reverse=True)
    unpaired = leads.pop() if len(leads) > len(lags) else 0.0
    system = _cascade(lags, leads + [0.0] * (len(lags) - len(leads)))
    if path.integrating:
        system = _integrated(system, unpaired)
    return system._replace(C=gain * system.C, D=gain * system.D)


def _as_written(path: PathSpec) -> _System:
    """A cascade in the order of the file, the gain in B and D: the form of :mod:`plant_models.schedules`."""
    gain, lags, leads = float(path.gain or 0.0), list(path.time_constants), list(path.lead_times)
    system = _cascade(lags, leads + [0.0] * (len(lags) - len(leads)))
    if path.integrating:
        system = _integrated(system)
    return system._replace(B=gain * system.B, D=gain * system.D)


def _cascade(lags: list[float], leads: list[float]) -> _System:
    """The product of (L_i s + 1)/(T_i s + 1), section by section; T positive, L of either sign. ::

        x_i' = (u_i - x_i)/T_i,   y_i = (1 - L_i/T_i) x_i + (L_i/T_i) u_i,   u_{i+1} = y_i

    A is lower triangular, and every state is 1 under a constant unit input.
    """
    order = len(lags)
    A, B = np.zeros((order, order)), np.zeros(order)
    row, direct = np.zeros(order), 1.0
    for i, (lag, lead) in enumerate(zip(lags, leads, strict=True)):
        A[i] = row / lag
        A[i, i] -= 1.0 / lag
        B[i] = direct / lag
        row = lead / lag * row
        row[i] += 1.0 - lead / lag
        direct *= lead / lag
    return _System(A, B, row, direct)


def _integrated(system: _System, lead: float = 0.0) -> _System:
    """(lead s + 1)/s after ``system``: y = z + lead D u, z' = (C + lead C A) x + (D + lead C B) u."""
    A, B, C, D = system
    order = B.size
    bigger = np.zeros((order + 1, order + 1))
    bigger[:order, :order] = A
    bigger[order, :order] = C + lead * (C @ A)
    output = np.zeros(order + 1)
    output[order] = 1.0
    return _System(bigger, np.append(B, D + lead * float(C @ B)), output, lead * D)


def _polynomial(path: PathSpec) -> tuple[_System, bool]:
    """The polynomial form; a pole at the origin is split off as the trailing integrator.

    With n the value at infinity, numerator/(s lags) = n + rest/(s lags): z' = (rest/lags) u, y = z + n u.
    """
    numerator, denominator = polynomials(path)
    if denominator.size < 2 or denominator[-1] != 0.0:
        return _rational(Polynomials(numerator, denominator), poles(path)), False
    direct = 0.0
    if numerator.size == denominator.size:
        direct = float(numerator[0] / denominator[0])
        numerator = (numerator - direct * denominator)[1:]
    lags = poles(path)[:-1]
    system = _integrated(_rational(Polynomials(numerator, denominator[:-1]), lags))
    return system._replace(D=direct), True


def _rational(polynomial: Polynomials, roots: NDArray[np.complex128]) -> _System:
    """A stable proper rational function as a chain of lags, from fast to slow, weighted in C.

    With sections s_1 ... s_m of unit steady gain, one per real pole or pair of complex poles, ::

        numerator/denominator = D + r_1/s_1 + r_2/(s_1 s_2) + ... + r_m/(s_1 ... s_m)

    where r_m is the remainder of dividing the numerator by s_m, r_(m-1) that of dividing the quotient by
    s_(m-1), and so on. Poles may coincide or lie decades apart.
    """
    numerator, denominator = polynomial
    padded = np.concatenate([np.zeros(denominator.size - numerator.size), numerator]) / denominator[-1]
    sections = sorted(roots[roots.imag >= 0.0], key=abs, reverse=True)
    A, B = _chain(sections)
    C, D = _weights(padded, sections)
    return _System(A, B, C, D)


def _chain(sections: list[complex]) -> tuple[Matrix, Vector]:
    """A and B of lags in series. A real pole has its output y as its state, a pair has y and y'/|pole|."""
    order = sum(2 if pole.imag else 1 for pole in sections)
    A, B = np.zeros((order, order)), np.zeros(order)
    start, before = 0, None
    for pole in sections:
        rate = abs(pole)
        if pole.imag:
            A[start : start + 2, start : start + 2] = [[0.0, rate], [-rate, 2.0 * pole.real]]
        else:
            A[start, start] = -rate
        driven = start + (1 if pole.imag else 0)
        if before is None:
            B[driven] = rate
        else:
            A[driven, before] = rate
        start, before = driven + 1, start
    return A, B


def _weights(numerator: Vector, sections: list[complex]) -> tuple[Vector, float]:
    """C and D of a chain, ``numerator`` having as many coefficients as the chain has states, and one.

    The slowest section is divided out first: division from the leading coefficient on is stable in the order of
    increasing magnitude (Peters & Wilkinson 1971, on the practical problems of solving polynomial equations).
    """
    rest, weights = numerator.copy(), []
    for pole in reversed(sections):
        rate = abs(pole)
        monic = [-2.0 * pole.real, rate**2] if pole.imag else [rate]
        for k in range(rest.size - len(monic)):
            rest[k + 1 : k + 1 + len(monic)] -= rest[k] * np.array(monic)
        remainder = rest[rest.size - len(monic) :]
        weights.append(remainder[::-1] * np.array([1.0, rate])[: len(monic)])
        rest = rest[: rest.size - len(monic)] * monic[-1]
    C = np.concatenate(weights[::-1]) if weights else np.zeros(0)
    return C, float(rest[0])
