"""The ``[[transfer_function]]`` tables of a model file: both forms, made proper, stable and per second."""

from __future__ import annotations

import math
from fractions import Fraction

from plant_models.model_kinds import (
    COEFFICIENTS,
    DURATION,
    FLAG,
    LEAD_TIMES,
    NOT_ZERO,
    SOURCE,
    TARGET,
    TIME_CONSTANTS,
    TIME_UNIT,
)
from plant_models.model_schedules import Points, read_points, with_schedule
from plant_models.model_tables import Table
from plant_models.quoting import quoted
from plant_models.specification import PathSpec

HIGHEST_DEGREE = 20
"""Coefficients of higher polynomials say nothing reliable about their roots in double precision."""

_FACTORED = ("gain", "time_constants", "lead_times", "integrating", "schedule")
_POLYNOMIAL = ("numerator", "denominator")
_WHY_TIME_UNIT = (
    ", since numerator and denominator, and the gain of an integrating path, are in some unit of time"
)


def read_path(table: Table) -> PathSpec:
    """One path, with every number converted to seconds."""
    table.only("from", "to", *_FACTORED, *_POLYNOMIAL, "time_unit", "dead_time")
    source, target = table.read("from", SOURCE), table.read("to", TARGET)
    dead_time = table.read_or("dead_time", DURATION, 0.0)
    if not table.has(*_POLYNOMIAL):
        return _factored(table, source, target, dead_time)
    for key in _FACTORED:
        if table.has(key) and table.values[key] is not False:
            table.fault(
                key, "expected either gain with time_constants or numerator with denominator, not both"
            )
    return _polynomial(table, source, target, dead_time)


def _factored(table: Table, source: str, target: str, dead_time: float) -> PathSpec:
    points = read_points(table)
    gain, time_constants = _parameters(table, points)
    lead_times = table.read_or("lead_times", LEAD_TIMES, ())
    integrating, per = table.read_or("integrating", FLAG, False), 1.0
    if integrating:
        per = table.read("time_unit", TIME_UNIT, _WHY_TIME_UNIT)
        if table.sound("gain") and gain / per == 0.0:
            table.fault("gain", NOT_ZERO.refusal(gain, "which is too small"))
        gain /= per
    else:
        table.read_or("time_unit", TIME_UNIT, 1.0)
    before = integrating and points is None
    poles = len(time_constants) + before
    if table.sound("time_constants", "lead_times", "integrating") and len(lead_times) > poles:
        table.fault(
            "lead_times",
            f"expected a proper transfer function, with no more lead times than time constants; "
            f"got {len(lead_times)} against {poles}{' (the integrator counted)' if before else ''}",
        )
    for key, times in (("time_constants", time_constants), ("lead_times", lead_times)):
        if len(times) > HIGHEST_DEGREE:
            table.fault(key, f"expected at most {HIGHEST_DEGREE} times; got {len(times)}")
    path = PathSpec(source, target, gain, time_constants, lead_times, dead_time, integrating)
    return with_schedule(path, points, per)


def _parameters(table: Table, points: Points | None) -> tuple[float, tuple[float, ...]]:
    """Gain and time constants; those of the first point where the schedule gives them."""
    if points is not None and points.gain is not None:
        gain = 1.0
    else:
        gain = table.read("gain", NOT_ZERO, ", or numerator with denominator")
    if points is not None and points.time_constants is not None:
        return gain, points.time_constants[0] if points.time_constants else ()
    return gain, table.read_or("time_constants", TIME_CONSTANTS, ())


def _polynomial(table: Table, source: str, target: str, dead_time: float) -> PathSpec:
    numerator = table.read("numerator", COEFFICIENTS, ", beside denominator")
    denominator = table.read("denominator", COEFFICIENTS, ", beside numerator")
    per = table.read("time_unit", TIME_UNIT, _WHY_TIME_UNIT)
    if table.sound("numerator") and not any(numerator):
        table.fault("numerator", f"expected a coefficient other than zero; got {quoted(list(numerator))}")
    if table.sound("denominator"):
        _check_denominator(table, denominator)
    if table.sound("numerator", "denominator"):
        _check_both(table, numerator, denominator)
    return PathSpec(
        source,
        target,
        dead_time=dead_time,
        integrating=len(denominator) > 1 and denominator[-1] == 0.0,
        numerator=_per_second(table, "numerator", numerator, per),
        denominator=_per_second(table, "denominator", denominator, per),
    )


def _check_denominator(table: Table, denominator: tuple[float, ...]) -> None:
    """Of the degree it claims, with at most one pole at the origin and every other in the left half plane."""
    degree = len(denominator) - 1
    if degree > HIGHEST_DEGREE:
        table.fault("denominator", f"expected a degree of at most {HIGHEST_DEGREE}; got {degree}")
        return
    if denominator[0] == 0.0:
        table.fault(
            "denominator",
            f"expected a first coefficient other than zero; got {quoted(list(denominator))}",
        )
        return
    at_origin = next(count for count, value in enumerate(reversed(denominator)) if value != 0.0)
    if at_origin > 1:
        table.fault(
            "denominator",
            f"expected at most one pole at the origin (one zero at its end, an integrator); got {at_origin}",
        )
    unstable = poles_not_in_left_half_plane(denominator[: len(denominator) - at_origin])
    if unstable:
        table.fault(
            "denominator",
            "expected every pole in the left half plane, but for one at the origin; "
            f"got an unstable denominator, {quoted(list(denominator))}",
        )


def _check_both(table: Table, numerator: tuple[float, ...], denominator: tuple[float, ...]) -> None:
    """Proper, and without a common factor s."""
    leading_zeros = next(count for count, value in enumerate(numerator) if value != 0.0)
    degree = len(numerator) - 1 - leading_zeros
    if degree > len(denominator) - 1:
        table.fault(
            "numerator",
            "expected a proper transfer function, with a numerator of no higher degree than the denominator; "
            f"got {degree} against {len(denominator) - 1}",
        )
    if len(denominator) > 1 and numerator[-1] == denominator[-1] == 0.0:
        table.fault(
            "numerator", "expected no common factor; got numerator and denominator that both end in zero"
        )


def _per_second(table: Table, key: str, coefficients: tuple[float, ...], per: float) -> tuple[float, ...]:
    """From s in 1/time_unit to s in 1/second: the coefficient of s^k times (seconds in time_unit)^k."""
    degree = len(coefficients) - 1
    if not table.sound(key) or degree > HIGHEST_DEGREE:
        return coefficients
    converted = tuple(value * per ** (degree - place) for place, value in enumerate(coefficients))
    for value, found in zip(coefficients, converted, strict=True):
        if not math.isfinite(found) or (value != 0.0 and found == 0.0):
            table.fault(key, f"{COEFFICIENTS.refusal(list(coefficients), 'which overflow in seconds')}")
            break
    return converted


def poles_not_in_left_half_plane(denominator: tuple[float, ...]) -> bool:
    """Whether a polynomial, its first and last coefficient other than zero, has a root with a real part >= 0.

    Routh's criterion in exact rational arithmetic: all roots lie in the open left half plane if and only if
    the first column of the array has one sign and no zero.
    Source: Routh 1877; any control textbook, e.g. Franklin, Powell, Emami-Naeini, "Feedback Control", ch. 3.

    >>> poles_not_in_left_half_plane((1.0, 2.0, 1.0)), poles_not_in_left_half_plane((1.0, 0.0, 1.0))
    (False, True)
    """
    exact = [Fraction(value) / Fraction(denominator[0]) for value in denominator]
    upper, lower = exact[0::2], exact[1::2]
    while lower:
        if lower[0] <= 0:
            return True
        factor = upper[0] / lower[0]
        padded = lower + [Fraction(0)] * (len(upper) - len(lower))
        following = [high - factor * low for high, low in zip(upper[1:], padded[1:], strict=True)]
        upper, lower = lower, following
    return False
