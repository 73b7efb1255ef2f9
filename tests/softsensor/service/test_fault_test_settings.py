"""Factors and reasons go into the model file's section on fault tests; nothing else moves."""

from __future__ import annotations

from importlib.resources import files

import pytest

from plant_models.errors import ModelFileError, Problem
from plant_models.model_file import parse_model_text
from softsensor.service.fault_test_settings import with_fault_tests

WOOD_BERRY = (files("plant_models.library") / "wood_berry.toml").read_text(encoding="utf-8")
BARE = WOOD_BERRY.split("[fault_tests]")[0]
SECTION = '[fault_tests]  # agreed with operations\nfalse_flag_interval = "30 d"\n'
WHY = 'innovations correlated 0.62 at lag one over 3 d, "badly"'


def new_lines(before: str, after: str) -> list[str]:
    old = before.splitlines()
    return [line for line in after.splitlines() if line not in old]


def test_a_file_without_the_section_gets_one_at_its_end() -> None:
    text = with_fault_tests(BARE, "m.toml", {"AI4101": 1.42}, {})
    assert text.startswith(BARE)
    assert text.removeprefix(BARE) == "\n[fault_tests]\nwidening = { AI4101 = 1.42 }\n"
    assert parse_model_text(text, "m.toml").widening == (("AI4101", 1.42),)


def test_a_section_keeps_its_comments_and_its_other_keys() -> None:
    text = with_fault_tests(BARE + SECTION, "m.toml", {}, {"AI4101": WHY})
    assert new_lines(BARE + SECTION, text) == [
        'disarmed = { AI4101 = "innovations correlated 0.62 at lag one over 3 d, \\"badly\\"" }'
    ]
    assert parse_model_text(text, "m.toml").disarmed == (("AI4101", WHY),)


def test_a_second_commissioning_takes_the_place_of_the_first() -> None:
    first = with_fault_tests(BARE + SECTION, "m.toml", {}, {"AI4101": WHY})
    second = with_fault_tests(first, "m.toml", {"AI4101": 1.3}, {})
    assert second == with_fault_tests(BARE + SECTION, "m.toml", {"AI4101": 1.3}, {})
    assert with_fault_tests(second, "m.toml", {}, {}) == BARE + SECTION


def test_line_ends_and_a_byte_order_mark_stay() -> None:
    text = "\ufeff" + (BARE + SECTION).replace("\n", "\r\n")
    changed = with_fault_tests(text, "m.toml", {"AI4101": 1.5}, {})
    assert changed.startswith("\ufeff")
    assert changed.count("\n") == changed.count("\r\n") == text.count("\n") + 1


def test_a_table_over_several_lines_is_refused_with_its_line() -> None:
    text = BARE + SECTION + "\n[fault_tests.widening]\nAI4101 = 1.5\n"
    with pytest.raises(
        Problem, match=r"m\.toml:\d+: widening: expected this key and its table alone on one line"
    ):
        with_fault_tests(text, "m.toml", {"AI4101": 1.2}, {})


@pytest.mark.parametrize(
    ("line", "message"),
    [
        ("widening = { AI4101 = 0.9 }", "widening.AI4101: expected a factor from 1 up; got 0.9"),
        ("widening = { AI41O1 = 1.1 }", "widening.AI41O1: expected a sensor's tag, one of AI4101"),
        ("widening = 1.4", "widening: expected a table such as { TI2101A = 1.42 }; got 1.4"),
        ("disarmed = { AI4101 = '' }", "disarmed.AI4101: expected a text that is not empty"),
    ],
)
def test_bad_factors_and_reasons(line: str, message: str) -> None:
    with pytest.raises(ModelFileError) as refused:
        parse_model_text(f"{BARE}{SECTION}{line}\n", "m.toml")
    (fault,) = refused.value.lines
    assert message in fault
    assert fault.startswith(f"m.toml:{(BARE + SECTION).count(chr(10)) + 1}: ")
