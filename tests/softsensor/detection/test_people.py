"""Decisions of people applied to what is open and to the tests, without a service around them."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from softsensor.detection import state_of_tests
from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.flags import Episode, Exclusion, Flag, FlagBook, Kind, Rest
from softsensor.detection.outcomes import FollowUp
from softsensor.detection.people import Act, Decision, Taken, ended, next_end, take
from softsensor.detection.state_of_tests import initial_tests
from softsensor.unit_design import design_unit

NOW, STEP = 1_796_083_200_000_000, 10_000_000
TAGS = ("TI1", "TI2", "PI3")


MODEL = """
[unit]
name = "R-1"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.3
range = [0.0, 4.0]

[[disturbance]]
name = "feed concentration"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "feed concentration"
to = "AY1"
gain = 0.9
time_constants = ["10 min"]
"""
SENSOR = """
[[sensor]]
tag = "{tag}"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15

[[transfer_function]]
from = "feed concentration"
to = "{tag}"
gain = 9.0
time_constants = ["5 min"]

[[transfer_function]]
from = "FI1"
to = "{tag}"
gain = -1.9
time_constants = ["4 min"]
"""


@pytest.fixture(scope="module")
def design() -> DetectionDesign:
    """A unit with three sensors."""
    text = MODEL + "".join(SENSOR.format(tag=tag) for tag in TAGS)
    return design_unit(build_plant_model(parse_model_text(text, "r1.toml"))).detection


def flag(tag: str, kind: Kind) -> Flag:
    return Flag(f"{tag} {kind}", tag, kind, NOW - 9 * STEP, NOW - 5 * STEP, None, 1.0, 0.1, 0.99, (tag,))


def decision(act: Act, tag: str = "", answers: str = "", seconds: float = 0.0) -> Decision:
    return Decision(1, act, tag, answers, "start-up" if act == "rest" else "", seconds, "A", "because")


def taken(design: DetectionDesign, book: FlagBook, one: Decision, cycle: int = 100) -> tuple[FollowUp, Taken]:
    return take(design, FollowUp(book), cycle, NOW, one)


def test_a_put_back_ends_every_exclusion_of_its_sensor_and_clears_its_shift_alone(
    design: DetectionDesign,
) -> None:
    book = FlagBook(
        (flag("TI1", "bias"), flag("TI1", "stuck"), flag("TI2", "drift")),
        exclusions=(
            Exclusion(0, 10, 20),
            Exclusion(0, 50),
            Exclusion(0, 60, 900, by_person=True),
            Exclusion(1, 55),
        ),
    )
    outcome, one = taken(design, book, decision("put back", "TI1", "TI1 bias"))
    assert [item.until for item in outcome.book.exclusions] == [20, 100, 100, None]
    assert [item.flag for item in outcome.book.open] == ["TI1 stuck", "TI2 drift"]
    assert [(item.flag, item.cleared) for item in outcome.changes] == [("TI1 bias", NOW)]
    assert one.refusal == ""


def test_a_flag_that_cleared_by_itself_does_not_keep_its_sensor_out(design: DetectionDesign) -> None:
    book = FlagBook(exclusions=(Exclusion(0, 50),))
    outcome, one = taken(design, book, decision("put back", "TI1", "TI1 bias"))
    assert (outcome.book.exclusions[0].until, outcome.changes, one.refusal) == (100, (), "")


def test_ending_a_person_s_leaving_out_leaves_what_followed_from_a_flag(design: DetectionDesign) -> None:
    book = FlagBook((flag("TI1", "bias"),), exclusions=(Exclusion(0, 50), Exclusion(0, 60, 900, True)))
    outcome, _ = taken(design, book, decision("put back", "TI1"))
    assert [item.until for item in outcome.book.exclusions] == [None, 100]
    assert outcome.book.open == book.open
    assert outcome.book.excluded(0, 100)
    assert not outcome.book.worked_on(0, 100)


@pytest.mark.parametrize(("seconds", "cycles"), [(0.1, 1), (10.0, 1), (10.1, 2), (3600.0, 360)])
def test_a_time_is_whole_cycles_and_never_shorter_than_asked_for(
    design: DetectionDesign, seconds: float, cycles: int
) -> None:
    outcome, one = taken(design, FlagBook(), decision("leave out", "PI3", seconds=seconds))
    assert outcome.book.exclusions == (Exclusion(2, 100, 100 + cycles, by_person=True),)
    assert one.until == NOW + cycles * STEP
    outcome, one = taken(design, FlagBook(), decision("rest", seconds=seconds))
    assert outcome.book.rest == Rest(100 + cycles, "start-up", NOW, "A: because")
    assert one.until == NOW + cycles * STEP


def test_a_second_leaving_out_takes_the_place_of_the_first(design: DetectionDesign) -> None:
    book = FlagBook(exclusions=(Exclusion(0, 50, 400, by_person=True),))
    outcome, _ = taken(design, book, decision("leave out", "TI1", seconds=100.0))
    assert outcome.book.exclusions == (Exclusion(0, 50, 100, True), Exclusion(0, 100, 110, True))
    assert ended_notes(design, outcome.book, 100) == []
    assert ended_notes(design, outcome.book, 110) == ["TI1 counts again"]


def ended_notes(design: DetectionDesign, book: FlagBook, cycle: int) -> list[str]:
    return [note.text for note in ended(design, book, initial_tests(3, 3, 1, 4), cycle, NOW).notes]


def test_the_next_end_is_the_nearest_one_still_to_come() -> None:
    exclusions = (Exclusion(0, 1, 90), Exclusion(1, 1), Exclusion(2, 1, 130, by_person=True))
    book = FlagBook(exclusions=exclusions, rest=Rest(120, "x"))
    assert [next_end(book, cycle) for cycle in (80, 90, 119, 120)] == [10, 30, 1, 10]
    assert next_end(book, 130) == next_end(FlagBook(), 0) > 10**15


def busy_tests() -> state_of_tests.TestState:
    """Sums up, runs of equal readings, readings missing: something in every place."""
    tests = initial_tests(3, 3, 1, 4)
    filled: dict[str, Any] = {"high": 7.0, "low": 1.0, "last_z": 9.0, "up": 1, "repeats": 6, "missing": 4}
    for name, value in filled.items():
        getattr(tests, name)[:] = value
    tests.lost[:] = 1
    tests.stuck[:] = 1
    tests.run_probability[:] = 0.01
    return tests


def test_a_sensor_that_counts_again_starts_all_sums_anew_and_is_judged_by_what_it_reads_from_then_on(
    design: DetectionDesign,
) -> None:
    tests = busy_tests()
    book = FlagBook(exclusions=(Exclusion(1, 50, 100),), episode=Episode(95))
    outcome = ended(design, book, tests, 100, NOW)
    for part in (tests.high, tests.low, tests.up):
        assert not part.any()
    assert np.all(np.isnan(tests.last_z))
    assert int(tests.valid_from[0]) == 100
    assert tests.down_since.tolist() == [100, 100, 100]
    for name, other in (("lost", 1), ("stuck", 1), ("missing", 4), ("repeats", 6)):
        assert getattr(tests, name).tolist() == [other, 0, other], name
    assert outcome.book.episode is None


def test_a_lost_or_stuck_flag_stays_for_its_test_to_clear(design: DetectionDesign) -> None:
    tests = busy_tests()
    flags = (flag("TI2", "lost"), flag("TI2", "stuck"))
    ended(design, FlagBook(flags, exclusions=(Exclusion(1, 50, 100, True),)), tests, 100, NOW)
    assert (int(tests.lost[1]), int(tests.stuck[1])) == (1, 1)


def test_where_nothing_ends_nothing_changes(design: DetectionDesign) -> None:
    tests, before = busy_tests(), busy_tests()
    book = FlagBook(exclusions=(Exclusion(1, 50, 101), Exclusion(0, 20, 99)), rest=Rest(101, "x"))
    outcome = ended(design, book, tests, 100, NOW)
    assert outcome == FollowUp(book)
    for name, part in tests._asdict().items():
        assert np.array_equal(part, getattr(before, name), equal_nan=True)


def test_a_sensor_still_kept_out_for_another_reason_does_not_count_again(design: DetectionDesign) -> None:
    book = FlagBook(exclusions=(Exclusion(1, 50), Exclusion(1, 60, 100, by_person=True)))
    assert ended_notes(design, book, 100) == []


def test_what_was_taken_enters_the_digest_whole() -> None:
    one = Taken(decision("leave out", "TI1", seconds=5.0), 7, NOW, NOW + STEP)
    others = (
        replace(one, cycle=8),
        replace(one, until=None),
        replace(one, refusal="no"),
        replace(one, decision=decision("leave out", "TI2", seconds=5.0)),
        replace(one, decision=decision("put back", "TI1")),
    )
    assert len({item.as_bytes() for item in (one, *others)}) == 6
