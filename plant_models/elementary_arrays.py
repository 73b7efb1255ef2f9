"""Exponential and logarithm of arrays from +, -, *, / and scaling by powers of two alone, element by element.

A machine's mathematics library may differ from another's in the last bit; what a transform makes of a reading goes into
the digest and may not. Relative error below 1e-14 (tested against math.exp and math.log).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_LN2_HIGH = 0.6931471803691238  # ln 2 to 32 bits, so that k * LN2_HIGH is exact
_LN2_LOW = 1.9082149292705877e-10
_SQRT_HALF = 0.7071067811865476
_EXP_TERMS = 18
_LOG_TERMS = 12
_LARGEST, _SMALLEST = 709.0, -700.0


def exponential(x: Floats) -> Floats:
    """e^x; 0 below -700, infinite above 709, nan for nan.

    >>> exponential(np.array([0.0, -1000.0, 1000.0])).tolist()
    [1.0, 0.0, inf]
    """
    there = np.where(np.isfinite(x), np.clip(x, _SMALLEST, _LARGEST), 0.0)
    k = np.floor(there / (_LN2_HIGH + _LN2_LOW) + 0.5)
    rest = (there - k * _LN2_HIGH) - k * _LN2_LOW
    total = np.ones_like(rest)
    for i in range(_EXP_TERMS, 0, -1):
        total = 1.0 + rest * total / i
    value = np.ldexp(total, k.astype(np.int64))
    return np.where(np.isnan(x), np.nan, np.where(x < _SMALLEST, 0.0, np.where(x > _LARGEST, np.inf, value)))


def logarithm(x: Floats) -> Floats:
    """ln x, by 2 artanh((m - 1)/(m + 1)) on the mantissa m; nan where x is not above zero, or not finite.

    >>> logarithm(np.array([1.0, 0.0])).tolist()
    [0.0, nan]
    """
    sound = np.isfinite(x) & (x > 0.0)
    mantissa, exponent = np.frexp(np.where(sound, x, 1.0))
    low = mantissa < _SQRT_HALF
    mantissa = np.where(low, 2.0 * mantissa, mantissa)
    power = np.where(low, exponent - 1, exponent).astype(np.float64)
    t = (mantissa - 1.0) / (mantissa + 1.0)
    square = t * t
    total = np.zeros_like(t)
    for i in range(_LOG_TERMS, -1, -1):
        total = total * square + 1.0 / (2 * i + 1)
    value = power * _LN2_HIGH + (power * _LN2_LOW + 2.0 * t * total)
    return np.where(sound, value, np.nan)
