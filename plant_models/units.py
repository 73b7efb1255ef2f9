"""Engineering units in the trade's spellings, on top of pint.

``parse_unit`` reads a spelling with a small grammar of its own and refuses whatever it does not know;
dimensions and conversions are pint's, whose registry is built on first use only, since that takes long.

Grammar::

    unit    = whole | product { "/" factor }         kJ/kg.K may mean two things: brackets say which
    product = factor { ("." | "*") factor }
    factor  = ( whole | symbol | "(" unit ")" ) [ exponent ]
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache, lru_cache
from typing import Any, NamedTuple

from plant_models.errors import UnitError
from plant_models.quoting import quoted, suggestion
from plant_models.unit_spellings import (
    DEFINITIONS,
    GAUGE,
    MISSPELLINGS,
    PREFIXED,
    PREFIXES,
    UNECE_CODES,
    WHOLE,
)

EXPECTED = 'a unit such as "degC", "m3/h", "kg/h", "mol/L", "wt%", "bar(g)" or "-" for none'

_LONGEST = 60
_EXPONENT = re.compile(r"(?:\^|\*\*)?([+-]?[1-9])(?![0-9]|\.[0-9])")
_SYMBOL = re.compile(r"[A-Za-z°%_]+")
_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻·µμΩ", "0123456789-.uuΩ")


def _known_symbols() -> dict[str, str]:
    symbols = dict(WHOLE)
    for symbol, (prefixes, name) in PREFIXED.items():
        symbols[symbol] = name
        symbols.update({prefix + symbol: PREFIXES[prefix] + name for prefix in prefixes})
    return symbols


_SYMBOLS = _known_symbols()
# Spellings that are more than letters, longest first so that m3(n) is not read as m3; but no quotients.
_ODD = sorted(
    (text for text in _SYMBOLS if not _SYMBOL.fullmatch(text) and "/" not in text and text not in "-1"),
    key=len,
    reverse=True,
)


@dataclass(frozen=True, slots=True)
class Unit:
    """An engineering unit.

    :ivar text: as written.
    :ivar expression: what pint is asked; temperatures are differences.
    :ivar gauge: a pressure above that of the atmosphere.
    """

    text: str
    expression: str
    gauge: bool = False

    @property
    def dimension(self) -> str:
        """pint's dimensionality, such as ``[length] ** 3 / [time]``."""
        return str(_registry().get_dimensionality(_registry().parse_expression(self.expression).units))

    def __str__(self) -> str:
        return self.text


class EngineeringUnits(NamedTuple):
    """What an OPC UA EUInformation says of a unit."""

    unece_code: str | None
    unit_id: int
    display_name: str


@lru_cache(maxsize=1024)
def parse_unit(text: str) -> Unit:
    """Read a unit.

    >>> parse_unit("m3/h").expression
    '(meter ** 3) / (hour)'
    >>> parse_unit("mol%").dimension
    '[mole_fraction]'

    :raises UnitError: what was found, what was expected and, where one is near, what may be meant.
    """
    plain = text.strip().translate(_SUPERSCRIPTS).replace("Ω", "ohm")
    if not plain or len(plain) > _LONGEST:
        raise UnitError(f"expected {EXPECTED}; got {quoted(text)}")
    plain = re.sub(r"^(wt|mass|mol|vol)[. -]+%$", r"\1%", plain)
    plain = re.sub(r"^(bar|mbar|kPa|MPa|Pa|psi) ?\(?(g|a)\)?$", r"\1(\2)", plain)
    if plain in _SYMBOLS:
        return Unit(text.strip(), _SYMBOLS[plain], plain in GAUGE)
    reader = _Reader(plain, text)
    return Unit(text.strip(), reader.unit(), reader.gauge)


def convert_difference(value: float, from_unit: str, to_unit: str) -> float:
    """A difference in another unit: 1.8 degF are 1 K, and 1 bar(g) is 1 bar(a).

    >>> convert_difference(1.0, "degC", "K")
    1.0

    :raises UnitError: the units do not parse, or measure different things.
    """
    return value * _ratio(from_unit, to_unit)


@lru_cache(maxsize=1024)
def difference_unit(text: str) -> str:
    """The unit of a difference between two values: 1.5 with unit degC is 1.5 K, and with bar(g) 1.5 bar.

    >>> difference_unit("degC"), difference_unit("bar(g)"), difference_unit("m3/h"), difference_unit("mK")
    ('K', 'bar', 'm3/h', 'mK')

    A text that is no unit comes back as it is.
    """
    try:
        unit = parse_unit(text)
    except UnitError:
        return text
    if unit.expression == parse_unit("degC").expression:
        return "K"
    if unit.text in ("degF", "°F"):
        return "degF of difference"
    return re.sub(r" ?\(?g\)?$", "", unit.text) if unit.text in GAUGE else unit.text


@lru_cache(maxsize=1024)
def _ratio(from_unit: str, to_unit: str) -> float:
    source, target = parse_unit(from_unit), parse_unit(to_unit)
    if source.expression == target.expression:
        return 1.0
    import pint

    registry = _registry()
    try:
        quantity = registry.parse_expression(source.expression) / registry.parse_expression(target.expression)
        return float(quantity.to(registry.dimensionless).magnitude)
    except pint.DimensionalityError:
        raise UnitError(
            f"expected units of one dimension; {from_unit} is {source.dimension}, "
            f"{to_unit} is {target.dimension}"
        ) from None


def engineering_units(text: str) -> EngineeringUnits:
    """UN/CEFACT code, unitId and display name for an OPC UA EUInformation (Part 8, 5.6.3).

    The unitId is the code's ASCII bytes read as one big-endian number, -1 where there is no code.
    Gauge pressures have none: the code for bar would claim an absolute one.

    >>> engineering_units("degC")
    EngineeringUnits(unece_code='CEL', unit_id=4408652, display_name='°C')
    """
    unit = parse_unit(text)
    code = None if unit.gauge else _codes().get(unit.expression)
    unit_id = -1 if code is None else int.from_bytes(code.encode("ascii"), "big")
    return EngineeringUnits(code, unit_id, _display(unit.text))


@cache
def _codes() -> dict[str, str]:
    """Codes by pint expression, so that every spelling of one unit gets the same code."""
    return {parse_unit(spelling).expression: code for spelling, code in UNECE_CODES.items()}


def _display(text: str) -> str:
    """As it is shown beside a number: °C, m³/h, µS/cm; nothing for dimensionless."""
    if text in {"-", "1"}:
        return ""
    shown = re.sub(r"\bdeg([CF])\b", r"°\1", text)
    shown = re.sub(r"\bu(?=[A-Zgms])", "µ", shown)
    return re.sub(
        r"(?<=[A-Za-z)])(?:\^|\*\*)?([23])(?![0-9A-Za-z])", lambda found: "²³"[int(found[1]) - 2], shown
    )


@cache
def _registry() -> Any:
    """pint's registry with the dimensions that it lacks."""
    import pint

    registry: Any = pint.UnitRegistry(cache_folder=None)
    for definition in DEFINITIONS:
        registry.define(definition)
    return registry


class _Reader:
    """Reads a composite unit into a pint expression, by recursive descent."""

    def __init__(self, plain: str, text: str) -> None:
        self._rest = plain
        self._text = text
        self.gauge = False

    def unit(self) -> str:
        expression = self._quotient()
        if self._rest:
            raise self._refusal(f"cannot read on from {quoted(self._rest)}")
        return expression

    def _quotient(self) -> str:
        parts = [self._product(divided=False)]
        while self._take("/"):
            parts.append(self._product(divided=True))
        return parts[0] if len(parts) == 1 else " / ".join(f"({part})" for part in parts)

    def _product(self, divided: bool) -> str:
        parts = [self._factor()]
        while (self._rest.startswith("*") and not self._rest.startswith("**")) or self._rest.startswith("."):
            if divided:
                raise self._refusal("after a / put a product in brackets, as in kJ/(kg.K)")
            self._rest = self._rest[1:]
            parts.append(self._factor())
        return " * ".join(parts)

    def _factor(self) -> str:
        if self._take("("):
            base = f"({self._quotient()})"
            if not self._take(")"):
                raise self._refusal("a bracket is not closed")
        elif self._rest.startswith("1/"):
            self._rest = self._rest[1:]
            return "dimensionless"
        else:
            base = self._symbol()
        match = _EXPONENT.match(self._rest)
        if match is None:
            return base
        self._rest = self._rest[match.end() :]
        return f"({base}) ** {match[1]}" if " " in base else f"{base} ** {match[1]}"

    def _symbol(self) -> str:
        odd = next((text for text in _ODD if self._rest.startswith(text)), None)
        if odd is not None:
            found = odd
        else:
            match = _SYMBOL.match(self._rest)
            if match is None:
                raise self._refusal(
                    "a unit is missing" if not self._rest else f"cannot read {quoted(self._rest)}"
                )
            found = match[0]
        if found not in _SYMBOLS:
            raise self._refusal(f"{quoted(found)} is not known{_suggestion(found)}")
        self.gauge = self.gauge or found in GAUGE
        self._rest = self._rest[len(found) :]
        name = _SYMBOLS[found]
        return f"({name})" if " " in name else name

    def _take(self, mark: str) -> bool:
        if not self._rest.startswith(mark):
            return False
        self._rest = self._rest[len(mark) :]
        return True

    def _refusal(self, reason: str) -> UnitError:
        hint = _suggestion(self._text.strip()) if "did you mean" not in reason else ""
        return UnitError(f"expected {EXPECTED}; got {quoted(self._text)}: {reason}{hint}")


def _suggestion(text: str) -> str:
    """``; did you mean 'kPa'?`` where one spelling is near, else nothing."""
    if text in MISSPELLINGS:
        return f"; did you mean {quoted(MISSPELLINGS[text])}?"
    return suggestion(text, _SYMBOLS, likeness=0.75)
