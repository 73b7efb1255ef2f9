"""The trade's units: what is read, what is refused, what is one dimension and what is not."""

from __future__ import annotations

import subprocess
import sys

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from plant_models.errors import UnitError
from plant_models.unit_spellings import UNECE_CODES, WHOLE
from plant_models.units import convert_difference, engineering_units, parse_unit

# Exact factors by definition: international pound and foot (1959), US gallon 231 in3, barrel 42 gal, standard
# atmosphere, kgf and conventional mmH2O through g = 9.80665 m/s2. MEMORY of the definitions (ISO 80000).
FACTORS = [
    ("degF", "K", 5.0 / 9.0),
    ("degC", "K", 1.0),
    ("degF", "degC", 5.0 / 9.0),
    ("m3/h", "L/min", 1000.0 / 60.0),
    ("t/h", "kg/s", 1.0 / 3.6),
    ("ton/h", "kg/h", 1000.0),
    ("lb/min", "kg/h", 0.45359237 * 60.0),
    ("gpm", "m3/h", 231.0 * 0.0254**3 * 60.0),
    ("bbl/d", "m3/d", 42.0 * 231.0 * 0.0254**3),
    ("barg", "kPa", 100.0),
    ("bar(g)", "bara", 1.0),
    ("psig", "kPa", 0.45359237 * 9.80665 / 0.0254**2 / 1000.0),
    ("mmH2O", "Pa", 9.80665),
    ("kPag", "kPa(a)", 1.0),
    ("mol/L", "kmol/m3", 1.0),
    ("g/L", "kg/m3", 1.0),
    ("cP", "mPa.s", 1.0),
    ("cSt", "mm2/s", 1.0),
    ("uS/cm", "S/m", 1e-4),
    ("wt%", "g/kg", 10.0),
    ("ppmw", "wt%", 1e-4),
    ("mol%", "mol/mol", 0.01),
    ("ppmv", "vol%", 1e-4),
    ("%", "-", 0.01),
    ("ppm", "%", 1e-4),
    ("rpm", "1/min", 1.0),
    ("Sm3/h", "Nm3/h", 273.15 / 288.15),
    ("kJ/(kg.K)", "J/kg/K", 1000.0),
    ("W/(m2.K)", "kJ/h/m2/degC", 3.6),
    ("Nm", "N.m", 1.0),
    ("h-1", "1/h", 1.0),
]


@pytest.mark.parametrize(("source", "target", "factor"), FACTORS)
def test_differences_convert_by_the_defined_factor(source: str, target: str, factor: float) -> None:
    assert convert_difference(2.5, source, target) == pytest.approx(2.5 * factor, rel=1e-12)
    assert convert_difference(2.5, target, source) == pytest.approx(2.5 / factor, rel=1e-12)


def test_a_degree_of_difference_is_never_an_offset() -> None:
    assert convert_difference(1.5, "degC", "K") == 1.5


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("wt%", "mol%"),
        ("wt%", "vol%"),
        ("mol%", "vol%"),
        ("wt%", "%"),
        ("mol%", "-"),
        ("wt%", "ppm"),
        ("Nm3/h", "m3/h"),
        ("pH", "-"),
        ("kg/h", "m3/h"),
        ("degC", "bar"),
        ("mol/L", "g/L"),
        ("NTU", "-"),
        ("eq/L", "mol/L"),
    ],
)
def test_different_things_do_not_convert(one: str, other: str) -> None:
    with pytest.raises(UnitError, match="expected units of one dimension"):
        convert_difference(1.0, one, other)


@pytest.mark.parametrize(
    "text",
    [
        "m3/h",
        "Nm3/h",
        "barg",
        "bara",
        "bar(g)",
        "kPa(g)",
        "kPag",
        "wt%",
        "mol%",
        "vol%",
        "%",
        "ppm",
        "degC",
        "K",
        "degF",
        "mol/L",
        "kmol/m3",
        "kg/h",
        "t/h",
        "ton/h",
        "pH",
        "uS/cm",
        "cP",
        "rpm",
        "cm",
        "V",
        "-",
        "1",
        "m³/h",
        "°C",
        "µS/cm",
        "m^3/h",
        "m**3/h",
        "1/h",
        "%/min",
        "Nl/min",
        "m3(n)/h",
        "kgf/cm2",
        "mg/L",
        "lbmol/h",
        "MMBtu/h",
        "ft3/min",
        "wt.%",
    ],
)
def test_the_trades_spellings_are_read_and_kept_as_written(text: str) -> None:
    unit = parse_unit(text)
    assert str(unit) == text
    assert unit.dimension


@pytest.mark.parametrize("spelling", [*WHOLE, *UNECE_CODES])
def test_every_listed_spelling_is_one_that_pint_understands(spelling: str) -> None:
    assert parse_unit(spelling).dimension


def test_gauge_pressure_is_marked() -> None:
    assert [parse_unit(text).gauge for text in ("barg", "kPa(g)", "psi g", "kPag", "barg/min")] == [True] * 5
    assert [parse_unit(text).gauge for text in ("bar", "bara", "kPa(a)", "kg/h", "degC")] == [False] * 5


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("furlong", "'furlong' is not known"),
        ("kpa", "did you mean 'kPa'?"),
        ("C", "did you mean 'degC'?"),
        ("F", "did you mean 'degF'?"),
        ("Kg/h", "did you mean 'kg'?"),
        ("%wt", "did you mean 'wt%'?"),
        ("kJ/kg.K", "put a product in brackets"),
        ("", "got ''"),
        ("m3//h", "cannot read '/h'"),
        ("m3/", "a unit is missing"),
        ("(m3", "a bracket is not closed"),
        ("m3)", "cannot read on from ')'"),
        ("m33", "cannot read on from '33'"),
        ("10 s", "cannot read '10 s'"),
        ("kg h", "cannot read on from ' h'"),
        ("1.5", "cannot read '1.5'"),
        ("x" * 500, "..."),
    ],
)
def test_what_is_no_unit_is_refused_with_the_expectation(text: str, said: str) -> None:
    with pytest.raises(UnitError) as refusal:
        parse_unit(text)
    message = str(refusal.value)
    assert message.startswith('expected a unit such as "degC", "m3/h"')
    assert said in message
    assert "\n" not in message
    assert len(message) < 300


@settings(deadline=None)  # the first dimension asked for builds the registry
@given(st.text(alphabet="mkgs3h/.*^()-+%12 °NPabart", max_size=20) | st.text())
def test_any_text_is_read_or_refused(text: str) -> None:
    try:
        unit = parse_unit(text)
    except UnitError:
        return
    assert unit.dimension


# unitId of OPC UA Part 8: CEL, KEL, P1, BAR, MQH, MIN, HUR, SEC, C36 and GL COMPUTED from the ASCII bytes of
# the codes of UN/CEFACT Recommendation 20, independently of this program.
@pytest.mark.parametrize(
    ("text", "code", "unit_id", "shown"),
    [
        ("degC", "CEL", 4408652, "°C"),
        ("K", "KEL", 4932940, "K"),
        ("%", "P1", 20529, "%"),
        ("bar", "BAR", 4342098, "bar"),
        ("bara", "BAR", 4342098, "bara"),
        ("m3/h", "MQH", 5067080, "m³/h"),
        ("m³/h", "MQH", 5067080, "m³/h"),
        ("min", "MIN", 5065038, "min"),
        ("h", "HUR", 4740434, "h"),
        ("s", "SEC", 5457219, "s"),
        ("mol/m3", "C36", 4404022, "mol/m³"),
        ("g/L", "GL", 18252, "g/L"),
        ("uS/cm", "G42", 4666418, "µS/cm"),
        ("-", "C62", 4404786, ""),
        ("barg", None, -1, "barg"),
        ("wt%", None, -1, "wt%"),
        ("Nm3/h", None, -1, "Nm³/h"),
        ("lb/min", None, -1, "lb/min"),
    ],
)
def test_engineering_units_of_opc_ua(text: str, code: str | None, unit_id: int, shown: str) -> None:
    assert engineering_units(text) == (code, unit_id, shown)


def test_no_two_listed_units_share_a_code() -> None:
    assert len(set(UNECE_CODES.values())) == len(UNECE_CODES)
    assert len({parse_unit(text).expression for text in UNECE_CODES}) == len(UNECE_CODES)


def test_reading_units_does_not_load_pint_and_loading_it_warns_of_nothing() -> None:
    program = (
        "import sys; from plant_models.units import parse_unit, convert_difference; parse_unit('m3/h');"
        "assert 'pint' not in sys.modules; assert convert_difference(1.0, 't/h', 'kg/h') == 1000.0"
    )
    subprocess.run([sys.executable, "-W", "error", "-c", program], check=True)
