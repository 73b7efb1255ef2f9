"""``leave_out_isolated`` in ``[fault_tests]``: off unless the file says otherwise, and on or off only."""

from __future__ import annotations

import pytest

from plant_models.errors import ModelFileError
from plant_models.library import published_model_path
from plant_models.model_file import parse_model_text

WHOLE = published_model_path("wood_berry").read_text(encoding="utf-8")
BEFORE, HEADING, _ = WHOLE.partition("[fault_tests]\n")
LINE = BEFORE.count("\n") + 2


def with_tests(lines: str) -> str:
    return f"{BEFORE}{HEADING}{lines}"


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (BEFORE, False),
        (WHOLE, False),
        (with_tests("leave_out_isolated = false\n"), False),
        (with_tests("leave_out_isolated = true\n"), True),
        (with_tests('false_flag_interval = "7 d"\nleave_out_isolated = true\n'), True),
    ],
    ids=["no section", "key left out", "false", "true", "beside the interval"],
)
def test_a_sensor_is_left_out_only_where_the_file_says_so(text: str, expected: bool) -> None:
    assert parse_model_text(text, "m.toml").leave_out_isolated is expected


def test_the_interval_keeps_its_default_beside_it() -> None:
    spec = parse_model_text(with_tests("leave_out_isolated = true\n"), "m.toml")

    assert spec.false_flag_interval == 30 * 86400.0


@pytest.mark.parametrize("value", ["1", "0", '"true"', '"yes"', "[]", "{}", "1.0"])
def test_anything_but_true_or_false_is_a_fault_at_its_line(value: str) -> None:
    with pytest.raises(ModelFileError) as raised:
        parse_model_text(with_tests(f"leave_out_isolated = {value}\n"), "m.toml")

    (fault,) = raised.value.faults
    assert (fault.line, fault.key) == (LINE, "leave_out_isolated")
    assert "expected true or false; got " in fault.message


def test_coming_back_by_itself_is_asked_for_and_needs_a_leaving_out() -> None:
    assert not parse_model_text(with_tests("leave_out_isolated = true\n"), "m.toml").back_by_itself
    both = with_tests("leave_out_isolated = true\nback_by_itself = true\n")
    assert parse_model_text(both, "m.toml").back_by_itself
    with pytest.raises(ModelFileError) as raised:
        parse_model_text(with_tests("back_by_itself = true\n"), "m.toml")
    (fault,) = raised.value.faults
    assert (fault.line, fault.key) == (LINE, "back_by_itself")
    assert "expected leave_out_isolated = true beside it" in fault.message


def test_a_misspelt_key_is_named_with_what_was_meant() -> None:
    with pytest.raises(ModelFileError) as raised:
        parse_model_text(with_tests("leave_out_isolatd = true\n"), "m.toml")

    (fault,) = raised.value.faults
    assert (fault.line, fault.key) == (LINE, "leave_out_isolatd")
    assert "did you mean 'leave_out_isolated'?" in fault.message


def test_a_promise_of_a_few_cycles_is_a_fault_at_its_line() -> None:
    with pytest.raises(ModelFileError) as raised:
        parse_model_text(with_tests('false_flag_interval = "99 min"\n'), "m.toml")

    (fault,) = raised.value.faults
    assert (fault.line, fault.key) == (LINE, "false_flag_interval")
    assert "expected at least 100 sample times, 100 min" in fault.message
