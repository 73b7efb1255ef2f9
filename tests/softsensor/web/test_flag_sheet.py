"""The sheet of a flag: what was seen, how sure, what it does to the estimate, what to check where; all of it on paper."""

from __future__ import annotations

import doctest
import html
import re
from typing import Any
from urllib.parse import quote
from xml.etree import ElementTree

import numpy as np
import pytest
from browser.recorded_unit import FLAG_ID, HOUR, MINUTE, MODEL, NOW, OLD_FLAG_ID, UNIT, course

from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from softsensor.estimation.steady_state import steady_state
from softsensor.records import decisions, happenings
from softsensor.records.decisions import LeftOut
from softsensor.records.engine import Database
from softsensor.records.happenings import Flag
from softsensor.web import likely_causes, picture
from softsensor.web.likely_causes import causes_of, check_of
from softsensor.web.picture import Course, Picture, round_step, svg_of, time_step

SHEET = f"/units/{UNIT}/flag/sheet?id="


def words_of(page: str) -> str:
    read = " ".join(html.unescape(re.sub(r"<[^>]+>", " ", page)).split())
    return re.sub(r" ([,.:;])", r"\1", read)


@pytest.fixture
def drift(recorded: Database, asker: Any) -> str:
    """The sheet of the drifting thermometer, which is left out."""
    with recorded.write() as connection:
        decisions.store_left_out(connection, 1, [LeftOut("TI2101B", NOW - 60 * MINUTE, None, False)])
    answer = asker.get(SHEET + quote(FLAG_ID))
    assert answer.status_code == 200
    return str(answer.text)


def test_it_says_what_is_believed_with_units_and_how_sure(drift: str) -> None:
    page = words_of(drift)
    assert "TI2101B: drift unit R-210" in page
    assert "measures temperature, range 0 to 200 degC" in page
    assert "Size at detection +1.21 ± 0.07 K (sd)" in page
    assert "Tolerance ± 1 K" in page
    assert "Probability over 99 % Group named alone" in page
    since = "Since 2026-12-01 14:00:00 UTC, with 95 % probability between 13:54:00 and 14:06:50 Detected"
    assert since in page
    assert "Detected 2026-12-01 14:20:00 UTC" in page
    assert "Left out 2026-12-01 14:00:00 UTC to now" in page


EXPLAINED = (
    "TI2101B 99.4 % this instrument reads wrong "
    "feed concentration 0.4 % the process moved "
    "FI2103 -> TI2101A 0.2 % the model no longer fits "
    "nothing below 0.1 % chance alone"
)


def test_what_could_explain_it_stands_on_both_pages_with_the_pictures(asker: Any, drift: str) -> None:
    page = asker.get(f"/units/{UNIT}/flag?id={quote(FLAG_ID)}").text
    for shown in (drift, page):
        assert EXPLAINED in words_of(shown)
        assert shown.count('<svg class="still"') == 2
        assert "with 95 % probability between 13:54:00 and 14:06:50" in words_of(shown)
    spike = asker.get(f"/units/{UNIT}/flag?id={quote(OLD_FLAG_ID)}").text
    assert "What could explain it" not in spike
    assert "with 95 % probability" not in spike


def test_the_present_error_of_a_drift_is_the_end_of_the_last_hour_s_line(asker: Any, drift: str) -> None:
    """Recomputed by the normal equations; a line's end has up to four times the variance of the mean."""
    made = course()
    last = made.times >= NOW - HOUR
    innovation, hours = made.innovation[last, 1], (made.times[last] - NOW) / HOUR
    away = hours - hours.mean()
    slope = float(away @ innovation / (away @ away))
    now = innovation.mean() - slope * hours.mean()
    sd = 2.0 * np.sqrt(0.16**2 - 0.15**2 + 0.15**2 / len(innovation))
    expected = (
        f"Now +{now:.2f} ± {sd:.2f} K (sd): reading less prediction, by a straight line through the last hour"
    )
    for shown in (drift, asker.get(f"/units/{UNIT}/flag?id={quote(FLAG_ID)}").text):
        assert expected in words_of(shown)
        assert f"{len(innovation)} readings" in words_of(shown)


def test_the_present_error_of_a_bias_is_the_mean_since_it_is_left_out(recorded: Database, asker: Any) -> None:
    group = ("TI2101A",)
    flag = Flag("f", "TI2101A", "bias", NOW - HOUR, NOW - MINUTE, 0.4, 0.1, 0.9, group)
    with recorded.write() as connection:
        happenings.open_flag(connection, 1, flag)
        decisions.store_left_out(connection, 1, [LeftOut("TI2101A", NOW - 10 * MINUTE, None, False)])
    made = course()
    innovation = made.innovation[made.times >= NOW - 10 * MINUTE, 0]
    sd = np.sqrt(0.16**2 - 0.15**2 + 0.15**2 / len(innovation))
    expected = f"Now {innovation.mean():+.2f} ± {sd:.2f} K (sd): mean of reading less prediction"
    assert expected in words_of(asker.get(SHEET + "f").text)


def test_of_a_sensor_that_counts_nothing_newer_is_said(recorded: Database, asker: Any) -> None:
    page = words_of(asker.get(SHEET + quote(FLAG_ID)).text)
    assert "the estimate follows its error. Nothing newer than the size at detection can be said" in page
    with recorded.write() as connection:
        decisions.store_left_out(connection, 1, [LeftOut("TI2101B", NOW - 60 * MINUTE, None, True)])
    assert "what it reads now means nothing" in words_of(asker.get(SHEET + quote(FLAG_ID)).text)
    with recorded.write() as connection:
        happenings.clear_flag(connection, FLAG_ID, NOW - MINUTE, "its test has come down")
    assert " Now " not in words_of(asker.get(SHEET + quote(FLAG_ID)).text)


@pytest.mark.parametrize(
    ("early", "late", "said"),
    [
        (None, NOW - HOUR, "before 14:00:00; how long before cannot be told"),
        (NOW - HOUR, NOW - HOUR, "in this very cycle"),
        (NOW - 30 * HOUR, NOW - HOUR, "between 2026-11-30 09:00:00 UTC and 2026-12-01 14:00:00 UTC"),
    ],
)
def test_an_onset_s_interval_in_words(
    recorded: Database, asker: Any, early: int | None, late: int, said: str
) -> None:
    group = ("TI2101A",)
    flag = Flag("f", "TI2101A", "bias", NOW - HOUR, NOW - MINUTE, 0.4, 0.1, 0.9, group, early, late)
    with recorded.write() as connection:
        happenings.open_flag(connection, 1, flag)
    assert f"Since 2026-12-01 14:00:00 UTC, with 95 % probability {said}" in words_of(
        asker.get(SHEET + "f").text
    )


def test_the_effect_on_the_estimate_is_that_of_the_settled_filter(drift: str) -> None:
    """Computed here from the Riccati solution with and without the sensor, without the report's code."""
    model = build_plant_model(parse_model_text(MODEL.format(title="x"), "m.toml"))
    row = model.stochastic.C[3]
    with_it = steady_state(model).variance(row) ** 0.5
    without = steady_state(model, [0, 2]).variance(row) ** 0.5
    now = float(course().sd[-1, 0])
    assert without > with_it
    assert f"AY2101 {with_it:.4f} mol/L {without:.4f} mol/L {now:.4f} mol/L" in words_of(drift)


def test_how_far_the_error_moves_the_estimate_is_that_of_a_filter_fed_with_it(drift: str) -> None:
    """A textbook filter of the disturbance, in numpy, with a bias on the second sensor until it has settled."""
    part = build_plant_model(parse_model_text(MODEL.format(title="x"), "m.toml")).stochastic
    A, C, R = part.A, part.C[:3], np.diag([0.15, 0.15, 0.2]) ** 2
    x, P = np.zeros(len(A)), part.P0.copy()
    said = re.search(
        r"an error of ([+-][\d.]+) K takes the estimate in the end, if it counted", words_of(drift)
    )
    assert said is not None
    y = np.array([0.0, float(said[1]), 0.0])
    for _ in range(20_000):
        K = P @ C.T @ np.linalg.inv(C @ P @ C.T + R)
        after = x + K @ (y - C @ x)
        x, P = A @ after, A @ (P - K @ C @ P) @ A.T + np.diag(part.q)
    found = re.search(r"AY2101 .*? mol/L .*? mol/L .*? mol/L ([+-][\d.]+) mol/L", words_of(drift))
    assert found is not None
    assert float(found[1]) == pytest.approx(float(part.C[3] @ after), abs=0.005 * abs(float(said[1])) + 1e-4)
    assert abs(float(found[1])) > 0.01


def test_reference_points_lie_around_the_operating_value_within_the_range(drift: str) -> None:
    made = course()
    since = made.times >= NOW - 60 * MINUTE
    value = float(np.median(made.predicted[since, 1]))
    page = words_of(drift)
    found = re.search(r"Operating value since then: ([\d.]+) degC", page)
    assert found is not None
    assert float(found[1]) == pytest.approx(value, abs=0.05)
    for away in (-10.0, 0.0, 10.0):
        assert f"{round(float(found[1]) + away):.2f} degC" in page  # whole degrees: the range is 200 K wide


def test_it_names_causes_a_check_room_for_the_calibration_and_a_caution(drift: str) -> None:
    page = words_of(drift)
    assert "thermocouple ageing at temperature" in page
    assert "block calibrator" in page
    assert page.count("Error as") == 2
    assert drift.count("<td></td><td></td><td></td><td></td>") == 3
    assert "Permit, bypass and isolation follow the site's procedures" in page
    assert "no safety function" in page


def test_pictures_are_sound_svg_with_courses_flag_and_left_out_period(drift: str) -> None:
    drawn = [
        ElementTree.fromstring(text)
        for text in re.findall(r"<svg class=\"still\".*?</svg>", drift, re.DOTALL)
    ]
    assert len(drawn) == 2
    kinds = [{part.get("class") for part in image.iter()} for image in drawn]
    assert {"reading", "predicted", "flagged", "left-out"} <= kinds[0]
    assert {"high", "low", "level", "flagged", "left-out"} <= kinds[1]
    for image in drawn:
        assert image.find("title") is not None
        flagged = next(part for part in image.iter("rect") if part.get("class") == "flagged")
        left, width = float(flagged.get("x", "")), float(flagged.get("width", ""))
        assert left + width == pytest.approx(picture.WIDTH - picture.RIGHT, abs=0.2)
        assert width > 0.5 * (picture.WIDTH - picture.LEFT - picture.RIGHT)


def test_a_flag_of_an_input_and_one_without_size_have_a_sheet_too(recorded: Database, asker: Any) -> None:
    flow = Flag("f", "FI2103", "bias", NOW - HOUR, NOW - MINUTE, 0.4, 0.1, 0.7, ("FI2103", "TI2101A"))
    with recorded.write() as connection:
        happenings.open_flag(connection, 1, flow)
    page = words_of(asker.get(SHEET + "f").text)
    assert "measures flow, range 0 to 20 m3/h" in page
    assert "no reading replaces it" in page
    assert "cannot tell it apart from TI2101A: look there too" in page
    assert "wrong density or pressure compensation" in page
    spike = words_of(asker.get(SHEET + quote(OLD_FLAG_ID)).text)
    assert "TI2105: spike" in spike
    assert "Size at detection no size" in spike
    assert "First look at terminals" in spike


def test_a_picture_maps_values_and_times_and_breaks_at_gaps() -> None:
    line = Course("reading", [0.0, 500.0, None, 1000.0, 2000.0], [1.0, 2.0, None, 3.0, 9.0])
    drawn = ElementTree.fromstring(str(svg_of(Picture('a "<b>"', "K<", 0.0, 1000.0, (line,), (), (3.0,)))))
    title = drawn.find("title")
    assert title is not None
    assert title.text == 'a "<b>"'
    path = next(part.get("d", "") for part in drawn.iter("path") if part.get("class") == "reading")
    assert path.count("M") == 2
    assert path.count("L") == 1
    (first,) = re.findall(r"^M([\d.]+) ", path)
    assert float(first) == picture.LEFT
    level = next(part.get("d", "") for part in drawn.iter("path") if part.get("class") == "level")
    last = re.findall(r" ([\d.]+)$", path)[0]
    assert f" {last}H" in level


def test_a_picture_of_nothing_and_of_a_constant_can_be_drawn() -> None:
    for line in (Course("reading", [], []), Course("reading", [0.0, 9.0], [5.0, 5.0])):
        assert "<path" in str(svg_of(Picture("x", "K", 0.0, 10.0, (line,))))


def test_axis_steps_are_round() -> None:
    assert [round_step(span) for span in (1.0, 7.0, 0.11, 12000.0)] == [0.2, 2.0, 0.05, 5000.0]
    assert [time_step(hours * 3600.0) for hours in (0.5, 4.0, 168.0)] == [300, 1800, 86400]


def test_every_kind_of_every_letter_has_causes_and_a_check() -> None:
    for kind in likely_causes.CAUSES:
        for letter in (*likely_causes.FIRST_LETTERS, "X"):
            assert len(causes_of(f"{letter}I1", kind)) >= 2
            assert check_of(f"{letter}I1", kind)
    for letter, kind in likely_causes.LETTER_CAUSES:
        assert letter in likely_causes.FIRST_LETTERS
        assert kind in likely_causes.CAUSES
    for module in (likely_causes, picture):
        result = doctest.testmod(module)
        assert (result.failed, result.attempted > 0) == (0, True)
