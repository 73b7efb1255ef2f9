"""Times as an engineer writes them, ``"4.2 min"``, to float seconds and back.

A number without a unit is refused: nobody can tell seconds from minutes afterwards. ``m`` is refused as well,
since it may be meant as minutes or months.
"""

from __future__ import annotations

import math
import re
from decimal import Decimal

from plant_models.errors import UnitError
from plant_models.quoting import quoted

SECONDS = {"ms": "0.001", "s": "1", "min": "60", "h": "3600", "d": "86400", "week": "604800"}
"""Seconds in each unit, as decimal text so that products are exact before they are rounded once."""

_SPELLINGS = {
    "ms": "ms millisecond milliseconds",
    "s": "s sec second seconds",
    "min": "min minute minutes",
    "h": "h hr hour hours",
    "d": "d day days",
    "week": "week weeks wk",
}
_UNITS = {spelling: unit for unit, spellings in _SPELLINGS.items() for spelling in spellings.split()}
_NUMBER_AND_UNIT = re.compile(r"([+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?)\s*([A-Za-z]*)", re.ASCII)

EXPECTED = 'a time with its unit, such as "10 s", "4.2 min", "2 h" or "30 d"'


def parse_duration(text: object) -> float:
    """Seconds in a time such as ``"4.2 min"``; never negative, always finite.

    >>> parse_duration("4.2 min"), parse_duration("30 d"), parse_duration("250 ms")
    (252.0, 2592000.0, 0.25)

    :raises UnitError: what was found and what was expected.
    """
    seconds = parse_signed_duration(text)
    if seconds < 0.0:
        raise UnitError(f"expected {EXPECTED}, not below zero; got {quoted(text)}")
    return seconds


def parse_signed_duration(text: object) -> float:
    """Like parse_duration, but a minus sign is allowed: a negative lead time means inverse response.

    >>> parse_signed_duration("-0.5 min")
    -30.0
    """
    if not isinstance(text, str):
        raise UnitError(f"expected {EXPECTED}, in quotation marks; got {quoted(text)}")
    match = _NUMBER_AND_UNIT.fullmatch(text.strip())
    if match is None:
        raise UnitError(f"expected {EXPECTED}; got {quoted(text)}")
    number, unit = match.groups()
    if not unit:
        raise UnitError(f"expected {EXPECTED}; got {quoted(text)}, which has no unit")
    if unit not in _UNITS:
        known = ", ".join(SECONDS)
        raise UnitError(f"expected {EXPECTED}; got {quoted(text)}, whose unit is none of {known}")
    return _product(number, SECONDS[_UNITS[unit]], text)


def parse_time_unit(text: object) -> float:
    """Seconds in a bare unit of time, such as ``"min"``.

    :raises UnitError: what was found and what was expected.
    """
    if not isinstance(text, str) or text.strip() not in _UNITS:
        known = ", ".join(f'"{unit}"' for unit in SECONDS)
        raise UnitError(f"expected a unit of time, one of {known}; got {quoted(text)}")
    return float(SECONDS[_UNITS[text.strip()]])


def format_duration(seconds: float) -> str:
    """The shortest text that parse_duration reads back to the same float; of two as short, the larger unit.

    >>> format_duration(10.0), format_duration(252.0), format_duration(7200.0), format_duration(0.25)
    ('10 s', '4.2 min', '2 h', '250 ms')
    """
    if not math.isfinite(seconds) or seconds < 0.0:
        raise UnitError(f"expected a finite number of seconds, not below zero; got {seconds!r}")
    if seconds == 0.0:
        return "0 s"
    best = f"{_digits(seconds)} s"
    for unit in ("ms", "min", "h", "d"):
        number = seconds / float(SECONDS[unit])
        if not math.isfinite(number) or number < 1.0:
            continue
        candidate = f"{_digits(number)} {unit}"
        shorter = len(candidate.split()[0]) < len(best.split()[0])
        as_short = len(candidate.split()[0]) == len(best.split()[0]) and unit != "ms"
        if (shorter or as_short) and parse_duration(candidate) == seconds:
            best = candidate
    return best


def _digits(number: float) -> str:
    """The shortest digits that give the same float, without a trailing ``.0``."""
    return repr(number).removesuffix(".0")


def _product(number: str, factor: str, text: str) -> float:
    """number * factor, rounded once."""
    if not math.isfinite(float(number) * float(factor)):
        raise UnitError(f"expected {EXPECTED}; got {quoted(text)}, which is too large")
    if float(number) == 0.0:
        return 0.0
    return float(Decimal(number) * Decimal(factor))
