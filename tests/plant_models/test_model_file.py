"""A sound model file is read as the contract says; numbers are converted to seconds."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from plant_models.errors import ModelFileError
from plant_models.model_file import parse_model_text, read_model_file
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    LabSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)

TEXT = """\
[unit]
name = "R-210"
title = "Jacketed stirred-tank reactor"
sample_time = "10 s"

[[input]]
tag = "FI2103"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]
validated_range = [9.0, 14.0]
max_age = "2 min"

[[sensor]]
tag = "TI2101A"
unit = "degC"
operating_point = 92.4
range = [0, 200]                  # whole numbers are numbers
noise_sd = 0.15
tolerance = 1.0
bias_walk_sd = 0.02
bias_initial_sd = 0.3
on_change = true
max_age = "1 min"
validated_range = [80.0, 120.0]

[[sensor]]
tag = "TI2102"
unit = "degC"
operating_point = 60
range = [0.0, 200.0]
noise_sd = 0.25

[[estimate]]
tag = "AY2101"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]
validated_range = [0.9, 1.8]
bias_walk_sd = 0.01
bias_initial_sd = 0.05
lab = { tag = "AL2101", sd = 0.02 }
interval_scale = 1.25

[[disturbance]]
name = "feed concentration"
sd = 0.08
time_constant = "1.5 h"

[[disturbance]]
name = "fouling"
walk_sd = 0.02
initial_sd = 0.1
at_input = "FI2103"

[[transfer_function]]
from = "FI2103"
to = "TI2101A"
gain = -1.9
time_constants = ["4.2 min", "0.6 min"]
lead_times = ["-30 s"]
dead_time = "0.5 min"

[[transfer_function]]
from = "FI2103"
to = "TI2102"
gain = 3
integrating = true
time_unit = "min"
time_constants = ["2 min"]

[[transfer_function]]
from = "feed concentration"
to = "AY2101"
numerator = [2.0]
denominator = [16.7, 1.0]
time_unit = "min"
dead_time = "3 s"

[[transfer_function]]
from = "feed concentration"
to = "TI2101A"
numerator = [0.0, 4.0, 2]
denominator = [3.0, 5.0, 0]
time_unit = "h"

[[transfer_function]]
from = "feed concentration"
to = "TI2102"
gain = 0.5

[fault_tests]
false_flag_interval = "10 d"
"""

SPEC = UnitSpec(
    name="R-210",
    title="Jacketed stirred-tank reactor",
    sample_time=10.0,
    inputs=(InputSpec("FI2103", "m3/h", 11.5, (0.0, 20.0), (9.0, 14.0), 120.0),),
    sensors=(
        SensorSpec("TI2101A", "degC", 92.4, (0.0, 200.0), 0.15, 1.0, (80.0, 120.0), 0.02, 0.3, True, 60.0),
        SensorSpec("TI2102", "degC", 60.0, (0.0, 200.0), 0.25, tolerance=1.0),
    ),
    estimates=(
        EstimateSpec(
            "AY2101",
            "mol/L",
            1.32,
            (0.0, 4.0),
            (0.9, 1.8),
            0.01,
            0.05,
            LabSpec("AL2101", 0.02),
            interval_scale=1.25,
        ),
    ),
    disturbances=(
        DisturbanceSpec("feed concentration", sd=0.08, time_constant=5400.0),
        DisturbanceSpec("fouling", walk_sd=0.02, initial_sd=0.1, at_input="FI2103"),
    ),
    paths=(
        PathSpec("FI2103", "TI2101A", -1.9, (252.0, 36.0), (-30.0,), 30.0),
        PathSpec("FI2103", "TI2102", 3.0 / 60.0, (120.0,), integrating=True),
        PathSpec(
            "feed concentration", "AY2101", dead_time=3.0, numerator=(2.0,), denominator=(16.7 * 60.0, 1.0)
        ),
        PathSpec(
            "feed concentration",
            "TI2101A",
            integrating=True,
            numerator=(0.0, 4.0 * 3600.0, 2.0),
            denominator=(3.0 * 3600.0**2, 5.0 * 3600.0, 0.0),
        ),
        PathSpec("feed concentration", "TI2102", 0.5),
    ),
    false_flag_interval=864_000.0,
    source_text=TEXT,
)


def test_every_key_of_the_format_is_read() -> None:
    assert parse_model_text(TEXT, "r210.toml") == SPEC


def test_a_file_is_read_as_its_text_is(tmp_path: Path) -> None:
    path = tmp_path / "r210.toml"
    path.write_bytes(TEXT.encode())
    assert read_model_file(path) == SPEC
    assert read_model_file(str(path)) == SPEC


def test_windows_line_ends_and_a_byte_order_mark_change_nothing(tmp_path: Path) -> None:
    path = tmp_path / "r210.toml"
    path.write_bytes(b"\xef\xbb\xbf" + TEXT.replace("\n", "\r\n").encode())
    assert replace(read_model_file(path), source_text=TEXT) == SPEC


def test_defaults() -> None:
    without = TEXT.replace('title = "Jacketed stirred-tank reactor"\n', "")
    without = without[: without.index("[fault_tests]")]
    spec = parse_model_text(without, "f")
    assert spec.title == "R-210"
    assert spec.false_flag_interval == 30 * 86400.0
    assert spec.sensors[1].tolerance == 4 * 0.25
    assert not spec.sensors[1].on_change
    assert spec.sensors[1].max_age is None


def test_the_model_that_the_contract_shows_needs_no_optional_key() -> None:
    """The smallest file: one sensor, one estimate, one disturbance that reaches both, no input."""
    text = """
        [unit]
        name = "U"
        sample_time = "1 s"
        [[sensor]]
        tag = "TI1"
        unit = "degC"
        operating_point = 0
        range = [-1, 1]
        noise_sd = 0.1
        [[estimate]]
        tag = "TY2"
        unit = "degC"
        operating_point = 0
        range = [-1, 1]
        [[disturbance]]
        name = "d"
        walk_sd = 1
        [[transfer_function]]
        from = "d"
        to = "TI1"
        gain = 1
        [[transfer_function]]
        from = "d"
        to = "TY2"
        gain = 1
        time_constants = ["1 s"]
    """
    assert parse_model_text(text, "f").estimates[0].lab is None


def test_other_ways_to_write_the_same_tables_are_read_alike() -> None:
    """TOML has several spellings of one document; a sub-table header instead of an inline table, for one."""
    other = TEXT.replace('lab = { tag = "AL2101", sd = 0.02 }\n', "")
    other = other.replace("_scale = 1.25\n", '_scale = 1.25\n[estimate.lab]\ntag = "AL2101"\nsd = 0.02\n')
    other = other.replace('[fault_tests]\nfalse_flag_interval = "10 d"', "").replace(
        "[unit]", 'fault_tests.false_flag_interval = "10 d"\n[unit]'
    )
    assert other != TEXT
    assert replace(parse_model_text(other, "f"), source_text=TEXT) == SPEC


# A path K/(T s + 1) in minutes, hours or seconds is one path: s in 1/minute is 60 times s in 1/second.
@pytest.mark.parametrize(("unit", "scale"), [("s", 1.0), ("min", 60.0), ("h", 3600.0), ("ms", 0.001)])
def test_polynomials_of_any_time_unit_are_converted_to_seconds(unit: str, scale: float) -> None:
    text = TEXT.replace(
        'denominator = [16.7, 1.0]\ntime_unit = "min"', f'denominator = [8.0, 6.0, 1.0]\ntime_unit = "{unit}"'
    )
    path = parse_model_text(text, "f").paths[2]
    assert path.denominator == pytest.approx((8.0 * scale**2, 6.0 * scale, 1.0), rel=1e-15)


def test_a_leading_integrator_counts_towards_properness() -> None:
    text = TEXT.replace('time_constants = ["2 min"]', 'lead_times = ["1 min"]')
    assert parse_model_text(text, "f").paths[1].lead_times == (60.0,)


@pytest.mark.parametrize(
    ("make", "said"),
    [
        ("missing", "there is no such file"),
        ("folder", "this is a directory"),
        ("latin-1", ":2: expected text in UTF-8; byte 0xe9"),
        ("utf-16", ":1: expected text in UTF-8"),
        ("binary", ":2: expected text in UTF-8"),
        ("empty", ":1: unit: missing; expected [unit]"),
    ],
)
def test_what_is_no_model_file_is_refused_with_its_name(tmp_path: Path, make: str, said: str) -> None:
    path = tmp_path / "model.toml"
    if make == "folder":
        path.mkdir()
    elif make != "missing":
        contents = {
            "latin-1": '[unit]\nname = "Réacteur"\n'.encode("latin-1"),
            "utf-16": TEXT.encode("utf-16"),
            "binary": bytes(range(256)),
            "empty": b"",
        }
        path.write_bytes(contents[make])
    with pytest.raises(ModelFileError) as refusal:
        read_model_file(path)
    assert refusal.value.lines[0].startswith(str(path))
    assert said in refusal.value.lines[0]


def test_a_path_that_cannot_be_a_path_is_refused() -> None:
    with pytest.raises(ModelFileError, match="expected a readable model file"):
        read_model_file("no\0path.toml")
