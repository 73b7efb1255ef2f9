"""A unit whose plant stops, starts and has a sensor mended: the tests rest, say why, and every run comes to the same."""

from __future__ import annotations

import asyncio
import itertools
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import softsensor
from connectors.readings import Reading
from plant_models.errors import Problem
from softsensor.cycle import UnitDesign
from softsensor.recorded_data import prepare_from_records
from softsensor.records import decisions, reader, series
from softsensor.records.engine import open_database
from softsensor.records.rests import StoredRest, rests_of
from softsensor.service.plant_state import StateRule

SUMS = 6
"""Columns of the record's sums that are sums: high and low of three sensors; probabilities follow."""

START, STEP, END = 1_796_083_200_000_000, 10_000_000, 400
SECOND = 1_000_000
STATES = (
    StateRule("off", "XS1", equals=0.0, settle=300 * SECOND),
    StateRule("grade change", "FI1", above=11.8, lasting=60 * SECOND, unit="m3/h"),
    StateRule("maintenance", "HS1", above=0.5, settle=60 * SECOND, sensor="TI1B"),
)
STATES_FILE = """
[[state]]
name = "off"
tag = "XS1"
equals = 0
settle = "5 min"

[[state]]
name = "grade change"
tag = "FI1"
above = 11.8
for = "1 min"

[[state]]
name = "maintenance"
tag = "HS1"
above = 0.5
settle = "1 min"
sensor = "TI1B"
"""
OFF, ON = 50, 80
"""Cycles at which the plant stops and is back; the tests go on 30 cycles later."""
WORK, DONE = 225, 300
"""Cycles at which the work on TI1B begins and ends; it counts again six cycles later."""


@pytest.fixture(scope="module")
def switched(story: Any) -> Any:
    """The story with two switches; XS1 and HS1 are in no model."""
    told = type(story)({cycle: list(items) for cycle, items in story.arrivals.items()})
    for tag, turns in (("XS1", {0: 1.0, OFF: 0.0, ON: 1.0}), ("HS1", {0: 0.0, WORK: 1.0, DONE: 0.0})):
        for cycle, value in turns.items():
            told.add(cycle, Reading(tag, value, START + cycle * STEP - SECOND))
    return told


@pytest.fixture
def new_run(new_bench: Any, design: UnitDesign) -> Callable[[str], Any]:
    """A bench whose unit has the states."""

    def made(url: str) -> Any:
        bench = new_bench(design, url)
        bench.states = STATES
        return bench

    return made


def results_of(url: str) -> dict[str, Any]:
    with open_database(url) as database:
        unit = reader.find_unit(database, "R-1").id
        blocks = list(series.published(database, unit, 0, END - 1))
        return {
            "status": np.concatenate([block.results.status for block in blocks])[:, 0],
            "used": np.concatenate([block.results.used for block in blocks]),
            "sums": np.concatenate([block.results.sums for block in blocks]),
            "reasons": [text for block in blocks for text in block.results.reasons],
            "digest": blocks[-1].results.digests[-1].hex(),
            "flags": [(flag.tag, flag.detected_us, flag.state) for flag in reader.flags_of(database, unit)],
            "rests": rests_of(database, unit),
            "left_out": decisions.left_out_of(database, unit),
            "notes": [item.event.text for item in reader.events_since(database) if item.event.kind == "rest"],
        }


def test_the_tests_rest_while_a_state_holds_and_the_record_says_which_why_and_until_when(
    new_run: Callable[[str], Any], switched: Any, sqlite_url: str
) -> None:
    asyncio.run(new_run(sqlite_url).run(switched, 0, END))
    found = results_of(sqlite_url)
    assert np.all(found["sums"][OFF : ON + 30, :SUMS] == 0.0)
    assert np.any(found["sums"][OFF - 10 : OFF, :SUMS] > 0.0)
    assert np.any(found["sums"][ON + 30 : ON + 36, :SUMS] > 0.0)
    assert np.all(found["status"][OFF : ON + 30] == 1)
    assert all("off: XS1 at 0" in text for text in found["reasons"][OFF : ON + 30])
    assert not any("off" in text for text in found["reasons"][:OFF] + found["reasons"][ON + 30 :])
    assert found["notes"][:3] == [
        "off: XS1 at 0: 0 since 2026-12-01 00:08:19 UTC: the tests of innovations rest, the estimates are "
        "Uncertain",
        "off has ended: XS1 at 0 no longer, 1 since 2026-12-01 00:13:19 UTC; the tests of innovations rest until "
        "2026-12-01 00:18:20 UTC",
        "off: the tests go on",
    ]
    assert (
        StoredRest(
            "off: XS1 at 0",
            "",
            START + OFF * STEP,
            START + (ON + 30) * STEP,
            "XS1 at 0: 0 since 2026-12-01 00:08:19 UTC",
        )
        in found["rests"]
    )


def test_a_grade_change_lets_the_tests_rest_and_leaves_the_estimates_good(
    new_run: Callable[[str], Any], switched: Any, sqlite_url: str
) -> None:
    asyncio.run(new_run(sqlite_url).run(switched, 0, END))
    found = results_of(sqlite_url)
    # FI1 rises at the reading before cycle 120; one minute later the state holds, and to the end
    assert np.all(found["sums"][126:200, :SUMS] == 0.0)
    assert np.any(found["sums"][120:126, :SUMS] > 0.0)
    assert np.all(found["status"][126:199] == 0)
    rest = next(item for item in found["rests"] if item.cause.startswith("grade change"))
    assert (rest.since_us, rest.until_us) == (START + 126 * STEP, None)
    assert rest.cause == "grade change: FI1 above 11.8 m3/h"


def test_a_sensor_under_maintenance_is_left_out_and_flagged_only_once_it_counts_again(
    new_run: Callable[[str], Any], switched: Any, sqlite_url: str
) -> None:
    bench = new_run(sqlite_url)
    bench.states = STATES[2:]
    asyncio.run(bench.run(switched, 0, END))
    found = results_of(sqlite_url)
    back = DONE + 6
    assert not np.any(found["used"][WORK:back, 1])
    (out,) = [item for item in found["left_out"] if item.by_person]
    assert (out.tag, out.since_us, out.until_us) == ("TI1B", START + WORK * STEP, START + back * STEP)
    assert all("TI1B is left out" in text for text in found["reasons"][WORK:back])
    # its bias began at cycle 240, under the work, and is still there when it counts again
    assert [tag for tag, _, _ in found["flags"]] == ["TI1B"]
    assert START + back * STEP <= found["flags"][0][1] <= START + (back + 40) * STEP
    rest = next(item for item in found["rests"] if item.tag == "TI1B")
    assert (rest.since_us, rest.until_us) == (START + WORK * STEP, START + back * STEP)


def test_stops_change_nothing_and_a_replay_from_the_records_gives_the_digest(
    new_run: Callable[[str], Any], design: UnitDesign, switched: Any, sqlite_url: str, database_url: str
) -> None:
    asyncio.run(new_run(sqlite_url).run(switched, 0, END))
    stops = (0, 49, 50, 51, 79, 80, 95, 110, 111, 127, 226, 300, 303, 306, 350, END)
    bench = new_run(database_url)
    for first, stop in itertools.pairwise(stops):
        asyncio.run(bench.run(switched, first, stop))
    one, other = results_of(sqlite_url), results_of(database_url)
    for name in one:
        same = (
            np.array_equal(one[name], other[name], equal_nan=one[name].dtype == np.float64)
            if isinstance(one[name], np.ndarray)
            else one[name] == other[name]
        )
        assert same, name
    for url in (sqlite_url, database_url):
        running, _, _ = prepare_from_records(design.model, url, "R-1", None, None)
        assert sum(len(stretch.results) for stretch in running.stretches()) == END
        assert running.digest == one["digest"]


def history_of(story: Any, tags: tuple[str, ...]) -> pd.DataFrame:
    """The readings of these tags as a history file has them: one row per second that has any."""
    rows: dict[int, dict[str, Any]] = {}
    for items in story.arrivals.values():
        for item in items:
            if item.tag in tags:
                row = rows.setdefault(item.time, {})
                row[item.tag] = item.value
                row[f"{item.tag}.quality"] = item.quality.name.title()
    frame = pd.DataFrame([{"time": time, **row} for time, row in sorted(rows.items())])
    frame["time"] = pd.to_datetime(frame["time"], unit="us", utc=True)
    return frame


def test_a_history_with_the_same_states_rests_at_the_same_cycles(
    new_run: Callable[[str], Any], design: UnitDesign, switched: Any, sqlite_url: str, tmp_path: Path
) -> None:
    asyncio.run(new_run(sqlite_url).run(switched, 0, END))
    live = results_of(sqlite_url)
    states = tmp_path / "states.toml"
    states.write_text(STATES_FILE)
    tags = ("FI1", "TI9", "TI1A", "TI1B", "TI2", "XS1", "HS1")
    result = softsensor.replay(design.model, history_of(switched, tags), states=states)
    notes = [text for text in result.summary["notes"] if "the tests" in text or "TI1B" in text]
    assert [text for text in notes if "inputs" not in text] == [
        text for text in live["notes"] if "inputs" not in text
    ] + [text for text in notes if "counts again" in text]
    with pytest.raises(Problem, match="no column 'HS1'"):
        softsensor.replay(design.model, history_of(switched, tags[:-1]), states=states)
