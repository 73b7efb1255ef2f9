"""The keys transform and limits of a model file: what they give, and every fault with its line and key."""

from __future__ import annotations

import math

import pytest

from plant_models.errors import ModelFileError
from plant_models.model_file import parse_model_text
from plant_models.transform import Transform

TEXT = """\
[unit]
name = "C-100"
sample_time = "1 min"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 50.0
range = [0.0, 100.0]
{input}

[[sensor]]
tag = "AI1"
unit = "ppm"
operating_point = 50.0
range = [0.0, 100.0]
noise_sd = 1.0
{sensor}

[[estimate]]
tag = "AY1"
unit = "ppm"
operating_point = 50.0
range = [0.0, 100.0]
{estimate}

[[disturbance]]
name = "feed"
sd = 1.0
time_constant = "1 h"

[[transfer_function]]
from = "FI1"
to = "AI1"
gain = 1.0

[[transfer_function]]
from = "feed"
to = "AI1"
gain = 1.0

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 1.0
"""
LINES = {"input": 10, "sensor": 18, "estimate": 25}


def text(**keys: str) -> str:
    return TEXT.format(**({"input": "", "sensor": "", "estimate": ""} | keys))


def faults(source: str) -> list[str]:
    with pytest.raises(ModelFileError) as raised:
        parse_model_text(source, "m.toml")
    return list(raised.value.lines)


@pytest.mark.parametrize("section", LINES)
@pytest.mark.parametrize(
    ("written", "expected"),
    [
        ('"log"', Transform("log")),
        ('"sqrt"', Transform("sqrt")),
        ('"square root"', Transform("sqrt")),
        ("[[0, 0], [50, 20.0], [100, 100]]", Transform("table", ((0.0, 0.0), (50.0, 20.0), (100.0, 100.0)))),
        ("[[0, 1], [100, -1]]", Transform("table", ((0.0, 1.0), (100.0, -1.0)))),
    ],
)
def test_a_transform_on_every_kind_of_tag(section: str, written: str, expected: Transform) -> None:
    spec = parse_model_text(text(**{section: f"transform = {written}"}), "m.toml")
    items = {"input": spec.inputs, "sensor": spec.sensors, "estimate": spec.estimates}
    assert {name: item[0].transform for name, item in items.items()} == {  # type: ignore[index]
        name: expected if name == section else None for name in LINES
    }


@pytest.mark.parametrize("section", LINES)
@pytest.mark.parametrize(
    ("written", "said"),
    [
        ('"ln"', "got 'ln'"),
        ("3", "got 3"),
        ("[]", "which has 0 points"),
        ("[[0, 0]]", "which has 1 points"),
        ("[[0, 0], [1]]", "where point 2 is no pair of finite numbers"),
        ("[[0, 0], [1, true]]", "where point 2 is no pair of finite numbers"),
        ("[[0, 0], [1, nan]]", "where point 2 is no pair of finite numbers"),
        ("[[0, 0], [1, inf]]", "where point 2 is no pair of finite numbers"),
        ("[[0, 0], [0, 1]]", "where the raw value of point 2 is not above the one before"),
        ("[[0, 0], [60, 1], [50, 2]]", "where the raw value of point 3 is not above the one before"),
        ("[[0, 0], [60, 1], [100, 1]]", "where the model value neither rises nor falls at point 3"),
        ("[[0, 0], [60, 1], [100, 0.5]]", "where the model value turns round at point 3"),
        ("[[0, 0], [1e-320, 1e300]]", "where the slope before point 2 is too small or too large"),
    ],
)
def test_what_is_no_transform_is_a_fault_with_line_and_key(section: str, written: str, said: str) -> None:
    (line,) = faults(text(**{section: f"transform = {written}"}))
    assert line.startswith(
        f"m.toml:{LINES[section]}: transform: expected 'log', 'sqrt' or a strictly monotone table"
    )
    assert said in line


@pytest.mark.parametrize(
    ("written", "point", "said"),
    [
        ('"log"', "0.0", "expected a value above zero"),
        ('"sqrt"', "0.0", "expected a value above zero"),
        ("[[10, 0], [90, 1]]", "95.0", "expected a value within its table, 10 to 90"),
    ],
)
def test_an_operating_point_without_a_slope_is_a_fault(written: str, point: str, said: str) -> None:
    before = "operating_point = 50.0\nrange = [0.0, 100.0]\nnoise_sd"
    source = text(sensor=f"transform = {written}").replace(before, before.replace("50.0", point))
    (line,) = faults(source)
    assert line.startswith(f"m.toml:15: operating_point: {said}")


@pytest.mark.parametrize(
    ("written", "limits"),
    [
        ("[0.0, 100.0]", (0.0, 100.0)),
        ("[0, inf]", (0.0, math.inf)),
        ("[-inf, 60]", (-math.inf, 60.0)),
        ("[50, 60]", (50.0, 60.0)),
    ],
)
def test_limits_of_an_estimate(written: str, limits: tuple[float, float]) -> None:
    spec = parse_model_text(text(estimate=f"limits = {written}"), "m.toml")
    assert spec.estimates[0].limits == limits


@pytest.mark.parametrize(
    ("written", "said"),
    [
        ("3", "got 3"),
        ("[1, 0]", "where the first is not below the second"),
        ("[0, nan]", "where the first is not below the second"),
        ("[-inf, inf]", "where at least one limit is finite"),
        ("[true, 60]", "got [True, 60]"),
        ("[0, 49]", "expected limits around operating_point, 50; got"),
    ],
)
def test_what_are_no_limits_is_a_fault_with_line_and_key(written: str, said: str) -> None:
    (line,) = faults(text(estimate=f"limits = {written}"))
    assert line.startswith("m.toml:25: limits: expected ")
    assert said in line


def test_limits_belong_to_estimates_alone() -> None:
    (line,) = faults(text(sensor="limits = [0, 100]"))
    assert line.startswith("m.toml:18: limits: unknown key")
