"""Whatever a file holds, it is read or refused with a ModelFileError: never any other error."""

from __future__ import annotations

import random
import tomllib
from pathlib import Path

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from plant_models.errors import ModelFileError
from plant_models.library import published_model_path
from plant_models.model_file import parse_model_text, read_model_file
from plant_models.model_paths import poles_not_in_left_half_plane
from plant_models.toml_lines import scan_toml_lines

SOUND = (
    published_model_path("wood_berry").read_text(encoding="utf-8")
    + """
[[sensor]]
tag = "LI4101"
unit = "%"
operating_point = 50.0
range = [0.0, 100.0]
noise_sd = 0.2
tolerance = 1.0
bias_walk_sd = 0.1
on_change = true
max_age = "1 min"

[[disturbance]]
name = "reflux wander"
walk_sd = 0.1
initial_sd = 0.1
at_input = "FI4101"

[[transfer_function]]
from = "FI4101"
to = "LI4101"
gain = -0.2
integrating = true
time_unit = "min"

[[transfer_function]]
from = "FI4102"
to = "LI4101"
numerator = [1.0]
denominator = [2.0, 1.0, 0.0]
time_unit = "min"
"""
)
LINES = SOUND.splitlines()
VALUES = [
    "0", "-1", "nan", "inf", "-inf", "1e308", "1e-320", "true", '""', '"x"', "[]", "[0.0, nan]", "[1, 2]",
    "{}", "[[]]", "{ tag = 1 }", "1979-05-27T07:32:00Z", "07:32:00", '"0 s"', '"1e400 d"', '"-3 min"',
    '["1 s", 2]',
    "[1.0, 0.0, 0.0]", "[0, 0]", "[1e308, 1e-308, 1e308]", '"\\n"', "'''a\nb'''", '"FI4101"',
    "0x" + "f" * 4000,
]  # fmt: skip


def refusal_of(text: str) -> ModelFileError | None:
    try:
        parse_model_text(text, "f")
    except ModelFileError as error:
        return error
    return None


def read_or_refused(text: str) -> None:
    """Either the text is a sound model, or every fault has a line that the text has, in one line."""
    error = refusal_of(text)
    if error is not None:
        assert error.faults
        assert [fault.line for fault in error.faults] == sorted(fault.line for fault in error.faults)
        assert all(1 <= fault.line <= text.count("\n") + 1 for fault in error.faults)
        assert all(("expected" in fault.message) | ("unknown" in fault.message) for fault in error.faults)
        assert all(len(line.splitlines()) == 1 for line in error.lines)


@st.composite
def mutations(draw: st.DrawFn) -> str:
    """The sound file with some lines dropped, doubled, moved, cut, or given another value."""
    lines = list(LINES)
    for _ in range(draw(st.integers(1, 4))):
        place = draw(st.integers(0, len(lines) - 1))
        kind = draw(st.sampled_from(["drop", "double", "cut", "value", "key", "move", "insert"]))
        line = lines[place]
        if kind == "drop":
            del lines[place]
        elif kind == "double":
            lines.insert(place, line)
        elif kind == "cut":
            lines[place] = line[: draw(st.integers(0, len(line)))]
        elif kind == "value":
            lines[place] = f"{line.split('=')[0]}= {draw(st.sampled_from(VALUES))}"
        elif kind == "key":
            lines[place] = (
                f"{draw(st.sampled_from(['lab', 'gain', 'to', 'x.y', '[[unit', '[lab]', 'unit']))} = 1"
            )
        elif kind == "move":
            lines.insert(draw(st.integers(0, len(lines) - 1)), lines.pop(place))
        else:
            lines.insert(place, draw(st.text(max_size=12)))
    return "\n".join(lines)


def test_the_file_that_is_damaged_below_is_sound() -> None:
    assert refusal_of(SOUND) is None


@settings(deadline=None, max_examples=300)
@given(mutations())
def test_a_damaged_file_is_read_or_refused(text: str) -> None:
    read_or_refused(text)


@settings(deadline=None)
@given(st.text(alphabet=st.characters(exclude_categories=["Cs"])))
@example("\u2028 = 1")
@example('"\u2028" = 1')
@example("unit.name = 1\nunit.x.y = 2\n")
@example("sensor = [{}, {}]\nestimate = [[]]\n")
@example('[[sensor]]\n[sensor.lab]\n[[sensor.x]]\n[[sensor.x]]\n"" = 0')
def test_any_text_is_read_or_refused(text: str) -> None:
    read_or_refused(text)


@settings(deadline=None)
@given(st.binary())
def test_any_bytes_are_read_or_refused(tmp_path_factory: pytest.TempPathFactory, content: bytes) -> None:
    path: Path = tmp_path_factory.getbasetemp() / "any.toml"
    path.write_bytes(content)
    with pytest.raises(ModelFileError):
        read_model_file(path)


def test_every_key_may_have_any_wrong_value() -> None:
    """The first of each key in each kind of table with each of the odd values: the whole product, without chance."""
    seen, header = set(), ""
    for place, line in enumerate(LINES):
        key = line.split("=")[0]
        header = line if line.startswith("[") else header
        if "=" in line and not line.startswith("#") and (header, key) not in seen:
            seen.add((header, key))
            for value in VALUES:
                read_or_refused("\n".join([*LINES[:place], f"{key}= {value}", *LINES[place + 1 :]]))
    assert len(seen) > 30


def leaves(node: object, place: tuple[str | int, ...] = ()) -> list[tuple[str | int, ...]]:
    """The places of all keys of a document, tables within arrays by their number."""
    if isinstance(node, dict):
        below = [leaf for key, value in node.items() for leaf in leaves(value, (*place, key))]
        return below or [place]
    if isinstance(node, list) and node and all(isinstance(item, dict) for item in node):
        return [leaf for number, item in enumerate(node) for leaf in leaves(item, (*place, number))]
    return [place]


# A document with every way to write a key, a string and an array, and the line of each key counted by hand.
ODDITIES = '''\
# a comment with [brackets] and = signs
top = "a # no comment" # a comment
"quoted key" = 'C:\\'
a.b . "c" = 1
[table] # comment
multi = """
[no.header]
x = 1 \\"""
"""
raw = \'\'\'
y = 2
''\'\'\'
array = [ # comment ]
  [1, 2], # ]
  "]",
]
after = { in = 1, line = [2] }
[[list]]
k = 1
[list.sub]
k = 2
[[list.deep]]
k = 3
[[list.deep]]
k = 4
[[list]]
[[list.deep]]
k = 5
last = """a"""'''
ODD_LINES = {
    ("top",): 2, ("quoted key",): 3, ("a", "b", "c"): 4, ("table", "multi"): 6, ("table", "raw"): 10,
    ("table", "array"): 13, ("table", "after", "in"): 17, ("table", "after", "line"): 17,
    ("list", 0, "k"): 19,
    ("list", 0, "sub", "k"): 21, ("list", 0, "deep", 0, "k"): 23, ("list", 0, "deep", 1, "k"): 25,
    ("list", 1, "deep", 0, "k"): 28, ("list", 1, "deep", 0, "last"): 29,
}  # fmt: skip


@pytest.mark.parametrize("line_end", ["\n", "\r\n"])
def test_the_line_of_every_key_of_an_odd_document(line_end: str) -> None:
    text = ODDITIES.replace("\n", line_end)
    assert set(leaves(tomllib.loads(text))) == set(ODD_LINES)
    lines = scan_toml_lines(text)
    assert {place: lines.line(*place) for place in ODD_LINES} == ODD_LINES
    assert (lines.line("table"), lines.line("list", 1), lines.line("list", 0, "sub")) == (5, 26, 20)
    assert lines.line("list", 1, "missing") == 26
    assert lines.line("nothing") == 1


def test_routh_agrees_with_polynomials_made_from_their_roots() -> None:
    """Stable exactly if every root that the polynomial was made from lies in the left half plane."""
    chance = random.Random(20261201)
    for _ in range(400):
        roots: list[complex] = []
        for _ in range(chance.randint(1, 4)):
            real, imaginary = chance.choice([-3, -2, -1, -0.5, 0.25, 1]), chance.choice([0, 1, 2])
            roots += [complex(real, imaginary), complex(real, -imaginary)] if imaginary else [complex(real)]
        coefficients = [complex(1)]
        for root in roots:
            shifted = [0j, *(value * root for value in coefficients)]
            coefficients = [high - low for high, low in zip([*coefficients, 0j], shifted, strict=True)]
        polynomial = tuple(
            value.real for value in coefficients
        )  # exact: all roots are small binary fractions
        assert poles_not_in_left_half_plane(polynomial) == any(root.real >= 0 for root in roots)
