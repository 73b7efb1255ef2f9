"""Lines on the console: a date with every time, a unit with every number, nothing said twice."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from independent.small_unit import MODEL

from softsensor.cli.console import line_of, units_of
from softsensor.detection.flags import Flag
from softsensor.estimation.lab_results import LabArrival, LabOutcome
from softsensor.service.live_feed import News
from softsensor.service.news import flag_news, lab_news
from softsensor.unit_design import load_model

DETECTED = 1_796_126_790_000_000
"""2026-12-01 12:06:30 UTC, by the calendar: 20788 days, 12 hours, 6 minutes and 30 seconds after 1970 began."""
MINUTE = 60_000_000


@pytest.fixture
def units(tmp_path: Path) -> dict[tuple[str, str], str]:
    """Units of the small unit's tags."""
    path = tmp_path / "r1.toml"
    path.write_text(MODEL)
    return units_of([load_model(path)])


def flag(cleared: int | None = None, **changed: Any) -> News:
    fields = {
        "flag": "F",
        "tag": "TI1",
        "kind": "drift",
        "onset": DETECTED - 7 * MINUTE,
        "detected": DETECTED,
    }
    fields |= {"size": 0.482, "size_sd": 0.05, "probability": 0.97, "group": ("TI1",), "cleared": cleared}
    return flag_news("R-1", Flag(**(fields | changed)))


def test_the_day_is_the_calendars() -> None:
    assert DETECTED == ((20788 * 24 + 12) * 3600 + 6 * 60 + 30) * 1_000_000


def test_a_flag_has_dates_and_a_difference_of_temperatures_is_in_kelvin(units: Any) -> None:
    assert line_of(flag(), units) == (
        "2026-12-01 12:06:30Z FLAG TI1 drift, since 2026-12-01 11:59:30Z, size 0.482 K (sd 0.05 K), "
        "probability 0.970"
    )


def test_an_input_and_a_group(units: Any) -> None:
    said = line_of(flag(tag="FI1", size=-0.3, group=("FI1", "TI1")), units)
    assert said is not None
    assert "size -0.3 m3/h (sd 0.05 m3/h)" in said
    assert said.endswith("cannot be told apart: FI1; TI1")


def test_a_flag_without_a_size_and_one_that_is_cleared(units: Any) -> None:
    assert line_of(flag(kind="lost", size=np.nan, size_sd=np.nan), units) == (
        "2026-12-01 12:06:30Z FLAG TI1 lost, since 2026-12-01 11:59:30Z"
    )
    assert line_of(flag(cleared=DETECTED + MINUTE), units) == "2026-12-01 12:07:30Z cleared: F"


def test_a_laboratory_result_has_the_estimates_unit(units: Any) -> None:
    arrival = LabArrival(0, "AL1", DETECTED - 40 * MINUTE, DETECTED, 1.3249)
    outcome = LabOutcome(arrival, 1, 1, 1.32, 0.0049, 0.02, "used", "")
    assert line_of(lab_news("R-1", outcome), units) == (
        "laboratory: 2026-12-01 11:26:30Z AL1 1.325 mol/L, reported 2026-12-01 12:06:30Z: used"
    )


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("test up; most probable: TI1 0.50", "test up; most probable: TI1 0.50"),
        ("most probable: TI1 0.50", "test up: most probable: TI1 0.50"),
    ],
)
def test_an_event_says_its_kind_once(units: Any, text: str, said: str) -> None:
    news = News("R-1", "event", {"time": DETECTED, "kind": "test up", "text": text})
    assert line_of(news, units) == f"2026-12-01 12:06:30Z {said}"


def test_the_connection_has_a_time(units: Any) -> None:
    news = News("R-1", "connection", {"time": DETECTED, "state": "connected", "reason": "subscribed"})
    assert line_of(news, units) == "2026-12-01 12:06:30Z plant connected: subscribed"


def test_cycles_are_left_out(units: Any) -> None:
    assert line_of(News("R-1", "cycle", {}), units) is None
