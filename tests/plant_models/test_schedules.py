"""Schedules of a model file: what is read, what is refused and with which words, and what they mean at one value."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.scheduled_paths import momentary, transition

from plant_models.building import build_plant_model
from plant_models.errors import ModelFileError, RealisationError
from plant_models.model_file import parse_model_text
from plant_models.schedules import parameters_at, path_at, scheduled_ranges, slowest_lag
from plant_models.specification import ScheduleSpec

SOUND = """\
[unit]
name = "E-301"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 10.0
range = [0.0, 20.0]

[[input]]
tag = "QI1"
unit = "kW"
operating_point = 100.0
range = [0.0, 200.0]

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]

[[disturbance]]
name = "feed"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "QI1"
to = "TI1"
dead_time = "14 s"
schedule = { tag = "FI1", at = [8, 12, 16], gain = [0.5, 0.3, 0.2], time_constants = [["6 min", "1 min"],
["4 min", "40 s"], ["3 min", "30 s"]] }

[[transfer_function]]
from = "feed"
to = "TI1"
gain = 14.0
time_constants = ["4.2 min"]

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.9
time_constants = ["6 min"]
"""
SCHEDULE = SOUND[SOUND.index("schedule") : SOUND.index("]] }") + 4]
HEADING = SOUND[: SOUND.index(SCHEDULE)].count("\n") - 3
"""Line of the transfer function's heading."""


def scheduled(text: str) -> str:
    return SOUND.replace(SCHEDULE, text)


def test_the_path_is_read_with_its_points_and_stands_at_the_operating_point() -> None:
    spec = parse_model_text(SOUND, "m.toml")
    path = spec.paths[0]
    assert path.schedule == ScheduleSpec(
        "FI1", (8.0, 12.0, 16.0), (0.5, 0.3, 0.2), ((360.0, 60.0), (240.0, 40.0), (180.0, 30.0))
    )
    assert (path.gain, path.time_constants) == (0.4, (300.0, 50.0))
    assert spec.paths[1].schedule is None
    assert scheduled_ranges(spec) == {"FI1": (8.0, 16.0)}
    assert slowest_lag(path) == 360.0


def test_what_is_not_in_the_schedule_is_the_paths_own_at_every_point() -> None:
    text = scheduled('time_constants = ["4 min"]\nschedule = { tag = "FI1", at = [8, 12], gain = [2, 1] }')
    assert parse_model_text(text, "m.toml").paths[0].schedule == ScheduleSpec(
        "FI1", (8.0, 12.0), (2.0, 1.0), ((240.0,), (240.0,))
    )
    text = scheduled(
        'gain = 3.0\nintegrating = true\ntime_unit = "min"\n'
        'schedule = { tag = "FI1", at = [8, 12], time_constants = [["2 min"], ["1 min"]] }'
    )
    path = parse_model_text(text, "m.toml").paths[0]
    assert path.schedule == ScheduleSpec("FI1", (8.0, 12.0), (0.05, 0.05), ((120.0,), (60.0,)))
    assert path.gain == 0.05


def test_an_input_may_be_there_for_its_schedule_alone() -> None:
    assert parse_model_text(SOUND, "m.toml").inputs[0].tag == "FI1"
    with pytest.raises(ModelFileError, match="FI1; it drives nothing"):
        parse_model_text(scheduled("gain = 1.0"), "m.toml")


SECOND = ', time_constants = [["2 min"], ["1 min"]] }'
FAULTS = [
    ("schedule = 3", "schedule", "expected a table such as { tag = 'FI2103'"),
    ('schedule = { at = [8, 12], gain = [2, 1] }', "schedule.tag", "missing; expected an input's tag"),
    ('schedule = { tag = "FI1", gain = [2, 1] }', "schedule.at", "missing; expected a list of finite numbers"),
    ('schedule = { tag = "FI1", at = [8, 12], gain = [2, 1], lead = 1 }', "schedule.lead", "unknown key"),
    ('gain = 1.0\nschedule = { tag = "FI1", at = [8, 12] }', "schedule.gain", "missing; expected gain, time_constants"),
    ('schedule = { tag = "FI1", at = [8, 12]' + SECOND, "gain", "missing; expected a finite number other than zero"),
    ('gain = 1.0\nschedule = { tag = "FI1", at = [8, 12], gain = [2, 1] }', "gain", "once: beside the schedule or in"),
    ('schedule = { tag = "FI1", at = [8], gain = [2] }', "schedule.at", "expected two values or more; got [8"),
    ('schedule = { tag = "FI1", at = [12, 8], gain = [2, 1] }', "schedule.at", "expected values that ascend"),
    ('schedule = { tag = "FI1", at = [8, 8], gain = [2, 1] }', "schedule.at", "expected values that ascend"),
    ('schedule = { tag = "FI1", at = [8, nan], gain = [2, 1] }', "schedule.at", "expected a list of finite numbers"),
    ('schedule = { tag = "FI1", at = [8, 21], gain = [2, 1] }', "schedule.at", "within the range of FI1, 0 to 20"),
    ('schedule = { tag = "FI1", at = [11, 12], gain = [2, 1] }', "schedule.at", "both sides of the operating point of FI1"),
    ('schedule = { tag = "FI1", at = [8, 12], gain = [2, 1, 3] }', "schedule.gain", "for each of the 2 values in at; got 3"),
    ('schedule = { tag = "FI1", at = [8, 12], gain = [0, 0] }', "schedule.gain", "expected a gain other than zero"),
    ('schedule = { tag = "FI1", at = [8, 12], gain = [1, -1] }', "schedule.gain", "other than zero at the operating point"),
    ('schedule = { tag = "FI1", at = [8, 12], gain = ["a", 1] }', "schedule.gain", "expected a list of finite numbers"),
    (
        'gain = 1.0\nschedule = { tag = "FI1", at = [8, 12], time_constants = ["2 min", "1 min"] }',
        "schedule.time_constants",
        "expected a list of lists of times above zero",
    ),
    (
        'gain = 1.0\nschedule = { tag = "FI1", at = [8, 12], time_constants = [["2 min"], ["0 s"]] }',
        "schedule.time_constants",
        "where item 2 is not",
    ),
    (
        'gain = 1.0\nschedule = { tag = "FI1", at = [8, 12], time_constants = [["2 min"], []] }',
        "schedule.time_constants",
        "expected as many times at each value in at; got 1, 0",
    ),
    (
        'gain = 1.0\nschedule = { tag = "FI1", at = [8, 12], time_constants = [["2 min"]] }',
        "schedule.time_constants",
        "expected a list of times for each of the 2 values in at; got 1 lists",
    ),
    (
        'gain = 1.0\nlead_times = ["1 min", "2 min"]\nschedule = { tag = "FI1", at = [8, 12]' + SECOND,
        "lead_times",
        "got 2 against 1",
    ),
    (
        'gain = 1.0\nintegrating = true\ntime_unit = "s"\nlead_times = ["1 min", "2 min"]\n'
        'schedule = { tag = "FI1", at = [8, 12]' + SECOND,
        "lead_times",
        "got 2 against 1",
    ),
    ('schedule = { tag = "TI1", at = [8, 12], gain = [2, 1] }', "schedule.tag", "which is a sensor: its noise"),
    ('schedule = { tag = "AY1", at = [8, 12], gain = [2, 1] }', "schedule.tag", "which is an estimate"),
    ('schedule = { tag = "feed", at = [8, 12], gain = [2, 1] }', "schedule.tag", "is not measured"),
    ('schedule = { tag = "FI2", at = [8, 12], gain = [2, 1] }', "schedule.tag", "did you mean 'FI1'?"),
    (
        'numerator = [1.0]\ndenominator = [2.0, 1.0]\ntime_unit = "min"\n'
        'schedule = { tag = "FI1", at = [8, 12], gain = [2, 1] }',
        "schedule",
        "expected either gain with time_constants or numerator with denominator",
    ),
]  # fmt: skip


@pytest.mark.parametrize(
    ("text", "key", "message"), FAULTS, ids=[f"{key} {n}" for n, (_, key, _) in enumerate(FAULTS)]
)
def test_each_fault_is_told_with_its_line_and_key(text: str, key: str, message: str) -> None:
    with pytest.raises(ModelFileError) as caught:
        parse_model_text(scheduled(text), "m.toml")
    found = [fault for fault in caught.value.faults if fault.key == key]
    assert any(message in fault.message for fault in found), caught.value
    line = HEADING if "missing" in message and "." not in key else HEADING + 4 + _lines_before(text, key)
    assert {fault.line for fault in found} == {line}


def _lines_before(text: str, key: str) -> int:
    """Lines above the key's own in what stands in the schedule's place."""
    name = key.split(".")[0]
    return next(number for number, line in enumerate(text.splitlines()) if line.startswith(name))


def test_paths_of_disturbances_have_their_places_in_the_stochastic_part() -> None:
    """Its own, and one at an input: behind the disturbance come its past values, then its paths in file order."""
    duty = '\n[[disturbance]]\nname = "duty"\nwalk_sd = 1.0\nat_input = "QI1"\n'
    text = SOUND.replace('time_constant = "1.5 h"\n', f'time_constant = "1.5 h"\n{duty}')
    text = text.replace("gain = 14.0\n", 'schedule = { tag = "FI1", at = [8, 12], gain = [14, 12] }\n')
    model = build_plant_model(parse_model_text(text, "m.toml"))
    found = model.scheduled_states
    assert [(item.path.source, item.state, item.newest, item.row) for item in found] == [
        ("feed", 1, 0, 0),
        ("QI1", 6, 4, 0),
    ]
    names = model.stochastic.state_names
    assert names[1] == "feed -> TI1, state 1"
    assert names[4:8] == (
        "duty, 1 sample ago",
        "duty, 2 samples ago",
        "duty -> TI1, state 1",
        "duty -> TI1, state 2",
    )
    assert found[1].fraction == pytest.approx(0.4)
    phi, older, recent = transition(found[1].path, 10.0, 0.4, 10.0)
    np.testing.assert_allclose(model.stochastic.A[6:8, 6:8], phi, rtol=1e-12)
    np.testing.assert_allclose(model.stochastic.A[6:8, 4], recent, rtol=1e-12)
    np.testing.assert_allclose(model.stochastic.A[6:8, 5], older, rtol=1e-12)


@pytest.mark.parametrize(
    ("value", "gain"), [(0.0, 2.0), (8.0, 2.0), (9.0, 1.75), (12.0, 1.0), (13.0, 2.0), (99.0, 5.0)]
)
def test_between_points_parameters_are_linear_and_outside_they_are_held(value: float, gain: float) -> None:
    schedule = ScheduleSpec("FI1", (8.0, 12.0, 16.0), (2.0, 1.0, 5.0), ((60.0,), (40.0,), (20.0,)))
    found, (lag,) = parameters_at(schedule, value)
    assert found == gain
    assert lag == np.interp(value, (8.0, 16.0), (60.0, 20.0))


def test_the_model_stands_at_the_operating_point() -> None:
    spec = parse_model_text(SOUND, "m.toml")
    model = build_plant_model(spec)
    phi, older, recent = transition(spec.paths[0], 10.0, 0.4, 10.0)
    np.testing.assert_allclose(model.paths[0].phi, phi, rtol=1e-12, atol=1e-16)
    np.testing.assert_allclose(model.paths[0].gamma_older, older, rtol=1e-12)
    np.testing.assert_allclose(model.paths[0].gamma_recent, recent, rtol=1e-12)
    np.testing.assert_array_equal(model.paths[0].c, momentary(spec.paths[0], 10.0).c)
    assert model.scheduled == ((0, spec.paths[0]),)


def test_the_digest_knows_every_point() -> None:
    spec = parse_model_text(SOUND, "m.toml")
    path = spec.paths[0]
    assert path.schedule is not None
    gain = (*path.schedule.gain[:-1], np.nextafter(path.schedule.gain[-1], 1.0))
    other = replace(path, schedule=replace(path.schedule, gain=gain))
    changed = replace(spec, paths=(other, *spec.paths[1:]))
    assert build_plant_model(changed).digest != build_plant_model(spec).digest
    assert path_at(other, 10.0).gain == path.gain


def test_a_schedule_made_by_hand_is_checked_too() -> None:
    spec = parse_model_text(SOUND, "m.toml")
    path = spec.paths[0]
    assert path.schedule is not None
    for broken, message in [
        (replace(path.schedule, tag="FI9"), "FI9 is no input"),
        (replace(path.schedule, at=(8.0, 8.0, 9.0)), "do not ascend"),
        (replace(path.schedule, gain=(1.0,)), "two points or more"),
        (replace(path.schedule, time_constants=((1.0, 1.0), (1.0, 0.0), (1.0, 1.0))), "not above zero"),
    ]:
        bad = replace(path, schedule=broken)
        with pytest.raises(RealisationError, match=message):
            build_plant_model(replace(spec, paths=(bad, *spec.paths[1:])))
