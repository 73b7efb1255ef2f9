"""A tuned model file: only the numbers change; comments, order, spacing and line ends stay."""

from __future__ import annotations

import difflib
import tomllib
from dataclasses import replace
from importlib.resources import files

import pytest

from plant_models.errors import Problem
from plant_models.model_file import parse_model_text
from softsensor.service.tuned_file import Change, changed_text, time_text

LIBRARY = files("plant_models.library")
WOOD_BERRY = (LIBRARY / "wood_berry.toml").read_text(encoding="utf-8")
CHANGES = (
    Change(("sensor", 0, "noise_sd"), 0.08577),
    Change(("disturbance", 0, "sd"), 0.02982),
    Change(("disturbance", 0, "time_constant"), 8298.0),
    Change(("estimate", 0, "interval_scale"), 1.37),
)


def difference(before: str, after: str) -> list[str]:
    lines = difflib.unified_diff(before.splitlines(), after.splitlines(), n=0, lineterm="")
    return [line for line in lines if line[0] in "+-" and line[:3] not in ("+++", "---")]


def test_only_the_numbers_change_and_comments_keep_their_columns() -> None:
    assert difference(WOOD_BERRY, changed_text(WOOD_BERRY, "m.toml", CHANGES)) == [
        "-noise_sd = 0.05                     # own choice",
        "+noise_sd = 0.08577                  # own choice",
        "+interval_scale = 1.37",
        "-sd = 0.05                           # own choice",
        '-time_constant = "2 h"               # own choice',
        "+sd = 0.02982                        # own choice",
        '+time_constant = "138.3 min"         # own choice',
    ]


def test_the_new_file_is_the_old_one_with_the_wanted_numbers() -> None:
    before = parse_model_text(WOOD_BERRY, "m.toml")
    after = parse_model_text(changed_text(WOOD_BERRY, "m.toml", CHANGES), "m.toml")

    assert after == replace(
        before,
        sensors=(replace(before.sensors[0], noise_sd=0.08577),),
        estimates=(replace(before.estimates[0], interval_scale=1.37),),
        disturbances=(replace(before.disturbances[0], sd=0.02982, time_constant=8298.0),),
        source_text=after.source_text,
    )


@pytest.mark.parametrize("name", ["heavy_oil_fractionator", "quadruple_tank", "wood_berry"])
def test_every_number_of_the_published_models_can_be_changed(name: str) -> None:
    text = (LIBRARY / f"{name}.toml").read_text(encoding="utf-8")
    spec = parse_model_text(text, name)
    changes = [Change(("sensor", i, "noise_sd"), 0.125) for i in range(len(spec.sensors))]
    changes += [Change(("disturbance", d, "sd"), 0.25) for d, item in enumerate(spec.disturbances) if item.sd]
    changes += [Change(("estimate", e, "interval_scale"), 1.5) for e in range(len(spec.estimates))]
    after = parse_model_text(changed_text(text, name, changes), name)

    assert {item.noise_sd for item in after.sensors} == {0.125}
    assert {item.sd for item in after.disturbances} <= {0.25, None}
    assert {item.interval_scale for item in after.estimates} == {1.5}
    assert (after.paths, after.inputs) == (spec.paths, spec.inputs)


def test_line_ends_and_the_mark_at_the_beginning_are_kept() -> None:
    windows = "\ufeff" + WOOD_BERRY.replace("\n", "\r\n")
    changed = changed_text(windows, "m.toml", CHANGES)

    assert changed == "\ufeff" + changed_text(WOOD_BERRY, "m.toml", CHANGES).replace("\n", "\r\n")


def test_a_file_that_ends_without_a_line_end() -> None:
    head, tail = WOOD_BERRY.split("[fault_tests]")[0].split("[[estimate]]")
    estimate, rest = tail.split("[[disturbance]]")
    text = f"{head}[[disturbance]]{rest}[[estimate]]{estimate.rstrip()}"
    changed = changed_text(text, "m.toml", CHANGES)

    assert parse_model_text(changed, "m.toml").estimates[0].interval_scale == 1.37


def test_a_tolerance_by_default_follows_the_noise_and_a_stated_one_stays() -> None:
    assert parse_model_text(changed_text(WOOD_BERRY, "m", CHANGES), "m").sensors[0].tolerance == 0.3
    without = WOOD_BERRY.replace("tolerance = 0.3                     # own choice\n", "")
    assert without != WOOD_BERRY
    assert parse_model_text(changed_text(without, "m", CHANGES), "m").sensors[0].tolerance == 4.0 * 0.08577


def test_quoted_keys_and_numbers_in_other_forms() -> None:
    text = WOOD_BERRY.replace("noise_sd = 0.05 ", '"noise_sd"=5e-2 ').replace('"2 h"', "'2 h'")
    changed = changed_text(text, "m.toml", CHANGES)

    assert tomllib.loads(changed)["sensor"][0]["noise_sd"] == 0.08577
    assert tomllib.loads(changed)["disturbance"][0]["time_constant"] == "138.3 min"


def test_a_number_that_does_not_stand_alone_is_named_with_its_line() -> None:
    begin, end = WOOD_BERRY.index("[[disturbance]]"), WOOD_BERRY.index("[[transfer_function]]")
    table = 'disturbance = [{ name = "feed flow", sd = 0.05, time_constant = "2 h" }]\n'
    text = table + WOOD_BERRY[:begin] + WOOD_BERRY[end:]

    with pytest.raises(Problem, match=r"expected"):
        changed_text(text, "m.toml", CHANGES)


def test_times_in_the_unit_that_suits_them() -> None:
    assert [time_text(value) for value in (0.5, 90.0, 8298.0, 10800.0, 36000.0)] == [
        "0.5 s", "90 s", "138.3 min", "3 h", "10 h",
    ]  # fmt: skip
