"""Exponential and logarithm from +, -, *, / and scaling by powers of two alone.

The mathematics library of a machine may differ from another's in the last bit; results that go into the digest may
not. Relative error below 1e-14 over the range used here (tested against math.exp and math.log).
"""

from __future__ import annotations

import math

from softsensor.estimation.compiling import uncounted

LN2_HIGH = 0.6931471803691238  # ln 2 to 32 bits, so that k * LN2_HIGH is exact
LN2_LOW = 1.9082149292705877e-10
SQRT_HALF = 0.7071067811865476
EXP_TERMS = 18
LOG_TERMS = 12


@uncounted
def exponential(x: float) -> float:
    """e^x; 0 below -700.

    >>> abs(exponential(1.0) - math.e) < 1e-15
    True
    """
    if x < -700.0:
        return 0.0
    k = math.floor(x / (LN2_HIGH + LN2_LOW) + 0.5)
    rest = (x - k * LN2_HIGH) - k * LN2_LOW
    total = 1.0
    for i in range(EXP_TERMS, 0, -1):
        total = 1.0 + rest * total / i
    return math.ldexp(total, int(k))


@uncounted
def error_function(x: float) -> float:
    """erf x for x >= 0, to 1.5e-7 (Abramowitz & Stegun, Handbook of Mathematical Functions, 7.1.26; from memory,
    checked against math.erf in the tests).

    >>> abs(error_function(0.5) - math.erf(0.5)) < 2e-7
    True
    """
    t = 1.0 / (1.0 + 0.3275911 * x)
    tail = t * (0.254829592 + t * (-0.284496736 + t * (1.421413741 + t * (-1.453152027 + t * 1.061405429))))
    return 1.0 - tail * exponential(-x * x)


@uncounted
def logarithm(x: float) -> float:
    """ln x for x > 0, by 2 artanh((m - 1)/(m + 1)) on the mantissa.

    >>> abs(logarithm(10.0) - math.log(10.0)) < 1e-15
    True
    """
    mantissa, exponent = math.frexp(x)
    if mantissa < SQRT_HALF:
        mantissa *= 2.0
        exponent -= 1
    t = (mantissa - 1.0) / (mantissa + 1.0)
    square = t * t
    total = 0.0
    for i in range(LOG_TERMS, -1, -1):
        total = total * square + 1.0 / (2 * i + 1)
    return exponent * LN2_HIGH + (exponent * LN2_LOW + 2.0 * t * total)
