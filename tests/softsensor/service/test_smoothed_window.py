"""A period on record, smoothed: what a replay of the whole records with ``--smooth`` gives, and conditioning on everything.

The story has gaps, Bad and Uncertain readings, readings that came late, late laboratory results (one impossible, one that
comes after the period), and a thermometer that is left out from its bias's onset on.
"""

from __future__ import annotations

import asyncio
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from independent.batch_conditioning import given_everything
from independent.dense_filter import LabRow
from sqlalchemy import text

from softsensor.cycle import UnitDesign
from softsensor.errors import RecordsError
from softsensor.estimation.kernel import CHUNK, Floats
from softsensor.recorded_data import prepare_from_records
from softsensor.records import reader, series
from softsensor.records.engine import Database, open_database
from softsensor.service.smoothed_run import SmoothedRun
from softsensor.service.smoothed_window import LONGEST, NEWEST, SmoothedWindow, smoothed_window

END = 400
LATE = {"TI1A": range(262, 266), "FI1": range(270, 275), "TI2": range(150, 153)}
"""Cycles whose readings come late, at cycle 300."""


@pytest.fixture(scope="module")
def interrupted(design: UnitDesign, tell: Any) -> Any:
    """The story, with readings that come late."""
    story = tell(design.model, END)
    for cycle in range(END):
        held = [item for item in story.arrivals.get(cycle, []) if cycle in LATE.get(item.tag, ())]
        story.arrivals[cycle] = [item for item in story.arrivals.get(cycle, []) if item not in held]
        for item in held:
            story.add(300, item)
    return story


@dataclass(frozen=True)
class Whole:
    """A replay of all records with ``--smooth``, and what it used."""

    estimate: Floats
    sd: Floats
    u: Floats
    y: Floats
    uncertain: Any
    labs: list[LabRow]


def whole_of(design: UnitDesign, url: str) -> Whole:
    running, _, _ = prepare_from_records(design.model, url, "R-1", None, None)
    with SmoothedRun(design) as smoothing:
        stretches = list(smoothing.keeping(running.stretches()))
        parts = list(smoothing.cycles(running))
    kept = running.run.past.readings_between
    blocks = [kept(first, min(first + CHUNK, END)) for first in range(0, END, CHUNK)]
    used = np.concatenate([stretch.results.used for stretch in stretches])
    y = np.concatenate([block.y for block in blocks])
    y[np.concatenate([block.y_quality for block in blocks]) > 1] = np.nan
    y[(used == 0) & np.isfinite(np.concatenate([s.results.innovation for s in stretches]))] = np.nan
    (out,) = running.run.state.book.exclusions
    y[out.since : out.until, out.sensor] = np.nan
    labs = [LabRow(lab.cycle, 0, lab.estimate, lab.value, lab.variance**0.5) for lab in running.counted_labs]
    return Whole(
        np.concatenate([part.estimate for part in parts]),
        np.concatenate([part.sd for part in parts]),
        np.concatenate([block.u for block in blocks]),
        y,
        np.concatenate([block.y_quality for block in blocks]) == 1,
        labs,
    )


def smoothed(database: Database, design: UnitDesign, cycles: range) -> SmoothedWindow:
    found = smoothed_window(database, 1, 1, cycles, lambda revision: design)
    assert found is not None
    return found


def test_a_period_up_to_the_newest_cycle_is_what_a_replay_of_all_records_gives(
    design: UnitDesign, new_bench: Any, interrupted: Any, database_url: str
) -> None:
    asyncio.run(new_bench(design, database_url).run(interrupted, 0, END, cut=False))
    whole = whole_of(design, database_url)
    assert len(whole.labs) == 3
    with open_database(database_url) as database:
        unit = reader.find_unit(database, "R-1").id
        assert series.decided(database, unit, 0, END)
        for first in (0, 64, 90, 201, 263, 399):
            found = smoothed(database, design, range(first, END))
            assert found.cycles.times.tolist() == [
                int(found.cycles.times[0]) + k * design.detection.sample_us for k in range(END - first)
            ]
            np.testing.assert_allclose(found.cycles.estimate, whole.estimate[first:], rtol=1e-9)
            np.testing.assert_allclose(found.cycles.sd, whole.sd[first:], rtol=1e-9)
            assert (found.given_to, found.remarks) == ((found.known_at, NEWEST), ())


def test_readings_count_for_as_long_again_as_the_period_lasts(
    design: UnitDesign, new_bench: Any, interrupted: Any, sqlite_url: str
) -> None:
    """Against conditioning on every reading of cycles 0 to 339: the period is 220 to 279."""
    asyncio.run(new_bench(design, sqlite_url).run(interrupted, 0, END, cut=False))
    whole = whole_of(design, sqlite_url)
    with open_database(sqlite_url) as database:
        found = smoothed(database, design, range(220, 280))
    last = found.cycles.times[0] + (339 - 220) * design.detection.sample_us
    assert found.given_to == (last, "as many cycles after the period as it has itself")
    to = slice(0, 340)
    labs = [lab for lab in whole.labs if lab.cycle < 340]
    value, sd = given_everything(design.model.spec, whole.u[to], whole.y[to], whole.uncertain[to], labs)
    rest = design.model.spec.estimates[0].operating_point
    assert np.abs(found.cycles.estimate - value[220:280]).max() <= 1e-8 * np.abs(value - rest).max()
    np.testing.assert_allclose(found.cycles.sd, sd[220:280], rtol=1e-8)


def test_without_a_state_on_record_it_begins_at_the_beginning_of_the_run(
    design: UnitDesign, new_bench: Any, interrupted: Any, sqlite_url: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    asyncio.run(new_bench(design, sqlite_url).run(interrupted, 0, END, cut=False))
    with open_database(sqlite_url) as database:
        expected = smoothed(database, design, range(230, 300))
        with database.write() as connection:
            connection.execute(text("DELETE FROM checkpoints WHERE cycle < 300"))
        found = smoothed(database, design, range(230, 300))
        np.testing.assert_allclose(found.cycles.estimate, expected.cycles.estimate, rtol=1e-9)
        np.testing.assert_allclose(found.cycles.sd, expected.cycles.sd, rtol=1e-9)
        monkeypatch.setattr("softsensor.service.smoothed_window.LONGEST", 100)
        far = smoothed(database, design, range(230, 300))
    assert len(far.cycles.times) == 0
    assert far.remarks[0].startswith(
        "not smoothed: no state that this release reads is on record from before"
    )


def test_states_of_another_release_are_not_taken(
    design: UnitDesign, new_bench: Any, interrupted: Any, sqlite_url: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    asyncio.run(new_bench(design, sqlite_url).run(interrupted, 0, END, cut=False))
    monkeypatch.setattr("softsensor.service.smoothed_window.LONGEST", 100)
    with open_database(sqlite_url) as database:
        with database.write() as connection:
            connection.execute(text("UPDATE checkpoints SET format_version = 1 WHERE cycle < 300"))
        found = smoothed(database, design, range(230, 300))
    assert found.remarks[0].startswith(
        "not smoothed: no state that this release reads is on record from before"
    )
    assert len(found.cycles.times) == 0


def test_cycles_that_are_missing_on_record_are_no_beginning(
    design: UnitDesign, new_bench: Any, interrupted: Any, sqlite_url: str
) -> None:
    asyncio.run(new_bench(design, sqlite_url).run(interrupted, 0, END, cut=False))
    with open_database(sqlite_url) as database:
        with database.write() as connection:
            for table in ("results", "revised_estimates", "cycles"):
                connection.execute(text(f"DELETE FROM {table} WHERE cycle BETWEEN 130 AND 140"))
            connection.execute(text("DELETE FROM checkpoints WHERE cycle BETWEEN 129 AND 300"))
        found = smoothed(database, design, range(100, 200))
    assert found.remarks == (
        "not smoothed: cycles before this period are missing on record, and no state from after them is there",
    )


def test_of_two_revisions_the_one_in_service_is_smoothed_and_the_page_can_say_so(
    design: UnitDesign, other_design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    """Its run begins afresh: what a replay of its own cycles gives."""
    asyncio.run(new_bench(design, sqlite_url).run(story, 0, 100, cut=False))
    asyncio.run(new_bench(other_design, sqlite_url).run(story, 110, 300, cut=False))
    designs = {1: design, 2: other_design}
    running, _, _ = prepare_from_records(other_design.model, sqlite_url, "R-1", None, None)
    with SmoothedRun(other_design) as smoothing:
        for _ in smoothing.keeping(running.stretches()):
            pass
        parts = list(smoothing.cycles(running))
    with open_database(sqlite_url) as database:
        last = series.latest_cycle(database, 1)
        assert last is not None
        found = smoothed_window(database, 1, 2, range(50, last + 1), lambda revision: designs[revision])
        old = smoothed_window(database, 1, 2, range(20, 60), lambda revision: designs[revision])
    assert found is not None
    np.testing.assert_allclose(found.cycles.estimate, np.concatenate([p.estimate for p in parts]), rtol=1e-9)
    assert found.revision_id == 2
    assert found.remarks[0].startswith("only a part of the period is smoothed")
    assert old is not None
    assert old.revision_id == 1
    assert old.remarks[0].startswith("smoothed with the revision of the model that ran then")
    assert len(old.cycles.times) == 40


def test_a_period_without_cycles_and_one_that_is_too_long(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    asyncio.run(new_bench(design, sqlite_url).run(story, 0, 20, cut=False))
    with open_database(sqlite_url) as database:
        assert smoothed_window(database, 1, 1, range(500, 600), lambda revision: design) is None
        with pytest.raises(RecordsError, match="expected 200000 at most"):
            smoothed_window(database, 1, 1, range(LONGEST + 1), lambda revision: design)
