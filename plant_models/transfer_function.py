"""One path of the plant as a rational transfer function, dead time apart.

The factored form of a path is ::

    G(s) = gain * prod(lead_i s + 1) / prod(tau_i s + 1) / (s if integrating else 1)

and the polynomial form ``numerator(s) / denominator(s)``, in descending powers of s. Here s is always in
1/second. A path that can be run has at most one pole at the origin (it then integrates), all others in the
open left half plane, and no more zeros than poles; :func:`faults` says what is wrong with one that cannot.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from plant_models.errors import RealisationError
from plant_models.specification import PathSpec

if TYPE_CHECKING:
    import control

Vector = NDArray[np.float64]
ComplexVector = NDArray[np.complex128]


class Polynomials(NamedTuple):
    """Numerator and denominator in descending powers of s (1/second), common powers of s cancelled."""

    numerator: Vector
    denominator: Vector


def label(path: PathSpec) -> str:
    """How messages name a path: ``FI2103 -> TI2101A``."""
    return f"{path.source} -> {path.target}"


def polynomials(path: PathSpec) -> Polynomials:
    """The path as one numerator and one denominator, leading zeros stripped and common factors s cancelled.

    :raises RealisationError: if a coefficient is missing or not finite, or the denominator is zero.
    """
    if path.numerator is not None:
        numerator = np.asarray(path.numerator, dtype=np.float64)
        denominator = np.asarray(path.denominator or (), dtype=np.float64)
    else:
        if path.gain is None:
            raise RealisationError(f"{label(path)}: neither a gain nor a numerator is given")
        numerator = np.array([path.gain], dtype=np.float64)
        for lead in path.lead_times:
            numerator = np.convolve(numerator, [lead, 1.0])
        denominator = np.ones(1)
        for lag in path.time_constants:
            denominator = np.convolve(denominator, [lag, 1.0])
        if path.integrating:
            denominator = np.append(denominator, 0.0)
    if not (np.isfinite(numerator).all() and np.isfinite(denominator).all()):
        raise RealisationError(
            f"{label(path)}: a coefficient of the transfer function is not a finite number"
        )
    numerator, denominator = _strip(numerator), _strip(denominator)
    if not denominator.size:
        raise RealisationError(f"{label(path)}: the denominator of the transfer function is zero")
    if not numerator.size:
        return Polynomials(np.zeros(1), denominator)
    while denominator.size > 1 and denominator[-1] == 0.0 and numerator.size > 1 and numerator[-1] == 0.0:
        numerator, denominator = numerator[:-1], denominator[:-1]
    return Polynomials(numerator, denominator)


def is_integrating(path: PathSpec) -> bool:
    """Whether the path has a pole at the origin."""
    denominator = polynomials(path).denominator
    return bool(denominator.size > 1 and denominator[-1] == 0.0)


def dc_gain(path: PathSpec) -> float:
    """The steady output per unit of input, G(0); ``inf`` for an integrating path."""
    numerator, denominator = polynomials(path)
    if denominator[-1] == 0.0:
        return math.inf
    return float(numerator[-1] / denominator[-1])


def ramp_gain(path: PathSpec) -> float:
    """An integrating path's steady slope per unit of input, s G(s) at s = 0, per second; 0 for others."""
    numerator, denominator = polynomials(path)
    if denominator.size < 2 or denominator[-1] != 0.0:
        return 0.0
    return float(numerator[-1] / denominator[-2])


def poles(path: PathSpec) -> ComplexVector:
    """The poles in 1/second, dead time apart; factored: exactly ``-1/tau_i``, then 0 if integrating."""
    if path.numerator is not None:
        return _roots(polynomials(path).denominator)
    values = [-1.0 / lag for lag in path.time_constants if lag != 0.0] + [0.0] * path.integrating
    return np.array(values, dtype=np.complex128)


def zeros(path: PathSpec) -> ComplexVector:
    """The finite zeros in 1/second; one in the right half plane means an inverse response."""
    if path.numerator is not None:
        return _roots(polynomials(path).numerator)
    return np.array([-1.0 / lead for lead in path.lead_times if lead != 0.0], dtype=np.complex128)


def faults(path: PathSpec) -> tuple[str, ...]:
    """What stops the path from being run, one line each; empty for a sound one.

    A path must be proper and, but for one pole at the origin, stable: the estimator starts it in steady state
    and runs it open loop. Its dead time must be finite and not negative.
    """
    try:
        numerator, denominator = polynomials(path)
    except RealisationError as error:
        return error.lines
    name, found = label(path), []
    if numerator.size > denominator.size:
        found.append(
            f"{name}: improper: the numerator's degree {numerator.size - 1} exceeds the denominator's, "
            f"{denominator.size - 1}"
        )
    if denominator.size > 2 and denominator[-1] == denominator[-2] == 0.0:
        found.append(f"{name}: more than one pole at the origin; one integrator is the most a path can have")
    right = [pole for pole in poles(path) if pole != 0.0 and pole.real >= 0.0]
    if right:
        found.append(
            f"{name}: unstable: pole at {right[0]:.6g} 1/s; every pole must have a negative real part"
        )
    if path.numerator is not None and path.integrating and denominator[-1] != 0.0:
        found.append(f"{name}: said to integrate, but the denominator has no pole at the origin")
    if not (math.isfinite(path.dead_time) and path.dead_time >= 0.0):
        found.append(
            f"{name}: the dead time is {path.dead_time}; expected a finite time that is not negative"
        )
    return tuple(found)


def transfer_function(path: PathSpec) -> control.TransferFunction:
    """The path as a python-control object, s in 1/second, without its dead time.

    python-control takes seconds to import, so it is imported here and not with the module.
    """
    import control

    numerator, denominator = polynomials(path)
    return control.TransferFunction(numerator, denominator, name=label(path))


def _strip(coefficients: Vector) -> Vector:
    """Without leading zeros; empty for the zero polynomial."""
    nonzero = np.flatnonzero(coefficients)
    return coefficients[nonzero[0] :] if nonzero.size else coefficients[:0]


def _roots(coefficients: Vector) -> ComplexVector:
    """Roots of a polynomial, found on a scaled axis so that minutes and hours are as accurate as seconds.

    Roots at the origin are exact zeros, and isolated roots are polished by a Newton step. Close ones are left alone:
    each is uncertain, but together they reproduce the coefficients, and polishing one by one would spoil that.
    """
    origin = 0
    while coefficients.size > 1 and coefficients[-1] == 0.0:
        coefficients, origin = coefficients[:-1], origin + 1
    degree = coefficients.size - 1
    if degree < 1:
        return np.zeros(origin, dtype=np.complex128)
    scale = abs(coefficients[0] / coefficients[-1]) ** (1.0 / degree)
    scaled = coefficients / coefficients[-1] * scale ** -np.arange(degree, -1.0, -1.0)
    found = np.roots(scaled).astype(np.complex128)
    found = np.where(_isolated(found), _polished(scaled, found), found)
    return np.concatenate([found / scale, np.zeros(origin, dtype=np.complex128)])


def _isolated(roots: ComplexVector) -> NDArray[np.bool_]:
    """Which roots are further from every other than a tenth of their own size."""
    distances = np.abs(roots[:, None] - roots[None, :])
    np.fill_diagonal(distances, np.inf)
    return np.asarray(distances.min(axis=1) > 0.1 * np.abs(roots))


def _polished(coefficients: Vector, roots: ComplexVector) -> ComplexVector:
    """The roots after one Newton step each."""
    slope = np.polyval(np.polyder(coefficients), roots)
    values = np.polyval(coefficients, roots)
    return np.asarray(roots - np.divide(values, slope, out=np.zeros_like(roots), where=slope != 0.0))
