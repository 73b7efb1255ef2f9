"""A unit stopped without notice at several cycles gives, cycle for cycle, what an undisturbed one gives."""

from __future__ import annotations

import asyncio
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from sqlalchemy import text

from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.plant_model import PlantModel
from softsensor.cycle import UnitDesign
from softsensor.errors import RecordsError, ReplayError
from softsensor.recorded_data import prepare_from_records
from softsensor.records import reader, series
from softsensor.records.engine import open_database
from softsensor.records.upgrade import upgrade_database
from softsensor.service.checkpoints import FORMAT

SPARE_SENSOR = """
[[sensor]]
tag = "TI8"
unit = "degC"
operating_point = 60.0
range = [0.0, 100.0]
noise_sd = 0.1
bias_walk_sd = 0.01

[[transfer_function]]
from = "TI9"
to = "TI8"
gain = 1.0
time_constants = ["1 min"]

"""
STOPS = (1, 37, 76, 128, 161, 201, 215, 231, 246, 262, 331)
END = 400


def model_of_text(text: str) -> PlantModel:
    return build_plant_model(parse_model_text(text, "r1.toml"))


def on_record(url: str, first: int = 0, last: int = END - 1) -> dict[str, Any]:
    """All that a unit's records hold, in a form to compare; ids and times of reporting aside."""
    with open_database(url) as database:
        unit = reader.find_unit(database, "R-1").id
        blocks = list(series.published(database, unit, first, last))
        used = list(series.readings(database, unit, first, last))
        names = ("estimate", "sd", "status", "predicted", "innovation", "innovation_sd", "used", "sums")
        found: dict[str, Any] = {
            name: np.concatenate([getattr(block.results, name) for block in blocks]).tobytes()
            for name in names
        }
        found["digests"] = [item.hex() for block in blocks for item in block.results.digests]
        found["reasons"] = [item for block in blocks for item in block.results.reasons]
        found["inputs"] = np.concatenate([block.readings.u_quality for block in used]).tobytes()
        found["flags"] = [
            (
                f.id,
                f.tag,
                f.kind,
                f.onset_us,
                f.detected_us,
                f.cleared_us,
                f.size,
                f.probability,
                f.group,
                f.onset_from_us,
                f.onset_to_us,
                f.hypotheses,
                f.state,
            )
            for f in reader.flags_of(database, unit)
        ]
        columns: tuple[str, ...] = (
            "tag",
            "sampled_us",
            "value",
            "arrived_cycle",
            "counted_cycle",
            "predicted",
            "innovation",
        )
        columns += ("sd", "status", "reason")
        found["labs"] = [
            tuple(getattr(lab, name) for name in columns) for lab in reader.lab_results_of(database, unit)
        ]
        found["revised"] = {
            cycle: (item.revised_at_cycle, item.estimate.tobytes(), item.sd.tobytes())
            for cycle, item in series.revised(database, unit, first, last).items()
        }
        found["events"] = sorted(item.event.key for item in reader.events_since(database))
    return found


def assert_same(one: dict[str, Any], other: dict[str, Any]) -> None:
    assert one.keys() == other.keys()
    for name in one:
        assert one[name] == other[name], name


async def interrupted(bench: Any, story: Any, stops: tuple[int, ...], end: int = END) -> None:
    first = 0
    for stop in (*stops, end):
        await bench.run(story, first, stop)
        first = stop


@pytest.fixture(scope="module")
def undisturbed(design: UnitDesign, story: Any, new_bench: Any, tmp_path_factory: Any) -> dict[str, Any]:
    """The records of the same unit without a stop."""
    url = f"sqlite:///{(tmp_path_factory.mktemp('undisturbed') / 'records.db').as_posix()}"
    upgrade_database(url)
    asyncio.run(new_bench(design, url).run(story, 0, END))
    return on_record(url)


def test_the_story_holds_what_restarts_must_survive(undisturbed: dict[str, Any]) -> None:
    assert [flag[1:3] for flag in undisturbed["flags"]] == [("TI1B", "bias")]
    assert undisturbed["flags"][0][8] == ("TI1B",)
    assert [lab[8] for lab in undisturbed["labs"]] == ["used", "used", "waiting for a person", "used"]
    assert sum("TI1B is left out" in reason for reason in undisturbed["reasons"]) > 100
    assert sum("FI1 is too old" in reason for reason in undisturbed["reasons"]) == 5
    assert sum("TI9 is Bad" in reason for reason in undisturbed["reasons"]) == 1
    assert {30, 100, 252} <= undisturbed["revised"].keys()
    assert len(undisturbed["digests"]) == len(set(undisturbed["digests"])) == END


def test_stops_change_nothing_on_record_and_a_replay_of_the_records_gives_the_digest(
    design: UnitDesign, new_bench: Any, story: Any, database_url: str, undisturbed: dict[str, Any]
) -> None:
    asyncio.run(interrupted(new_bench(design, database_url), story, STOPS))
    assert_same(on_record(database_url), undisturbed)
    running, _, cycles = prepare_from_records(design.model, database_url, "R-1", None, None)
    assert sum(len(stretch.results) for stretch in running.stretches()) == cycles == END
    assert running.digest == undisturbed["digests"][-1]
    assert [lab.status for lab in running.totals.labs] == ["used", "used", "waiting for a person", "used"]


def test_stops_within_a_row_of_impossible_readings_change_nothing(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str, database_url: str
) -> None:
    """The gate's count goes on after a restart: single readings, rows of two, a step; each stopped within."""
    spoilt = replace(story, arrivals=dict(story.arrivals))
    for cycle, size in ((50, 40.0), (129, 40.0), (130, 40.0), (161, -30.0), (162, -30.0), (163, -30.0)):
        spoilt.arrivals[cycle] = [
            replace(item, value=item.value + size) if item.tag == "TI2" else item
            for item in spoilt.arrivals[cycle]
        ]
    asyncio.run(new_bench(design, sqlite_url).run(spoilt, 0, 200))
    asyncio.run(interrupted(new_bench(design, database_url), spoilt, (50, 51, 130, 131, 162, 163, 164), 200))
    undisturbed = on_record(sqlite_url, 0, 199)
    assert_same(on_record(database_url, 0, 199), undisturbed)
    used = np.frombuffer(undisturbed["used"], dtype=np.int8).reshape(200, 3)
    assert np.flatnonzero(used[:, 2] == 0).tolist()[:6] == [50, 90, 129, 130, 161, 162]
    assert used[[131, 163], 2].all()


def test_a_checkpoint_of_an_earlier_release_starts_the_unit_afresh_and_one_of_a_later_one_is_refused(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    asyncio.run(new_bench(design, sqlite_url).run(story, 0, 100, cut=False))
    for version in (FORMAT - 1, FORMAT + 1):
        with open_database(sqlite_url) as database, database.write() as connection:
            connection.execute(text(f"UPDATE checkpoints SET format_version = {version}"))
        if version < FORMAT:
            bench = new_bench(design, sqlite_url)
            asyncio.run(bench.run(story, 100, 140, cut=False))
            assert bench.steps[0].results.first == 128
        else:
            with pytest.raises(
                RecordsError, match=f"has format {version}; this release reads format {FORMAT}"
            ):
                asyncio.run(new_bench(design, sqlite_url).run(story, 140, 150, cut=False))


async def two_revisions(one: Any, other: Any, story: Any, stops: tuple[int, ...] = ()) -> None:
    """The unit on one revision to cycle 130, then on the other to 240, stopped at cycles of its own."""
    await one.run(story, 0, 130, cut=False)
    first = 130
    for stop in stops:
        await other.run(story, first, stop)
        first = stop
    await other.run(story, first, 240, cut=False)


def test_another_revision_starts_afresh_and_the_same_one_resumes(
    design: UnitDesign,
    other_design: UnitDesign,
    new_bench: Any,
    story: Any,
    database_url: str,
    sqlite_url: str,
) -> None:
    """The other revision's first cycle is numbered with the next multiple of 64; it remembers nothing from before."""
    for url, stops in ((sqlite_url, ()), (database_url, (150, 170))):
        asyncio.run(two_revisions(new_bench(design, url), new_bench(other_design, url), story, stops))
    first, last = 192, 192 + 240 - 130
    undisturbed, stopped = (on_record(url, first, last) for url in (sqlite_url, database_url))
    assert_same(stopped, undisturbed)
    with open_database(database_url) as database:
        unit = reader.find_unit(database, "R-1").id
        blocks = list(series.published(database, unit, 0, last))
        revisions = [item.digest for item in reader.revisions_of(database, unit)]
    assert [(block.results.first_cycle, len(block.times)) for block in blocks] == [(0, 130), (first, 110)]
    assert revisions == [design.model.digest, other_design.model.digest]
    early, late = stopped["labs"][1], stopped["labs"][2]
    assert (early[8], early[9]) == ("left out", "sampled before the first cycle that is remembered")
    assert late[3] == first + 215 - 130


def test_records_of_two_revisions_replay_to_each_one_s_digest(
    design: UnitDesign, other_design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    asyncio.run(two_revisions(new_bench(design, sqlite_url), new_bench(other_design, sqlite_url), story))
    for model, first, last in ((design.model, 0, 129), (other_design.model, 192, 301)):
        running, notes, count = prepare_from_records(model, sqlite_url, "R-1", None, None)
        assert sum(len(stretch.results) for stretch in running.stretches()) == count == last - first + 1
        assert running.digest == on_record(sqlite_url, first, last)["digests"][-1]
        assert "other revisions" in notes[0].text


def test_a_model_that_never_ran_is_run_over_all_cycles_unless_they_have_a_gap(
    design: UnitDesign, other_design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    third = model_of_text(design.model.spec.source_text.replace("gain = 9.0", "gain = 8.5"))
    asyncio.run(two_revisions(new_bench(design, sqlite_url), new_bench(other_design, sqlite_url), story))
    running, notes, count = prepare_from_records(third, sqlite_url, "R-1", None, None)
    assert (sum(len(stretch.results) for stretch in running.stretches()), count, notes) == (240, 240, [])
    fewer = model_of_text(design.model.spec.source_text.replace("[[sensor]]", SPARE_SENSOR + "[[sensor]]", 1))
    with pytest.raises(ReplayError, match="2 inputs and 3 sensors; expected those of the model, 2 and 4"):
        prepare_from_records(fewer, sqlite_url, "R-1", None, None)
    asyncio.run(new_bench(design, sqlite_url).run(story, 300, 310, cut=False))
    with pytest.raises(
        ReplayError, match="no cycle is on record between 2026-12-01T00:39:50Z and 2026-12-01T00:50"
    ):
        prepare_from_records(third, sqlite_url, "R-1", None, None)
    running, notes, count = prepare_from_records(third, sqlite_url, "R-1", None, "2026-12-01T00:39:55Z")
    assert count == 240


@pytest.mark.parametrize("text", ["yesterday", "2026-12-01", "2026-13-01T00:00:00Z", ""])
def test_a_period_needs_times_with_a_zone(
    design: UnitDesign, sqlite_url: str, text: str, new_bench: Any, story: Any
) -> None:
    asyncio.run(new_bench(design, sqlite_url).run(story, 0, 2, cut=False))
    with pytest.raises(ReplayError, match="--from: "):
        prepare_from_records(design.model, sqlite_url, "R-1", text, None)
    with pytest.raises(ReplayError, match="no cycle of R-1 is on record in this period"):
        prepare_from_records(design.model, sqlite_url, "R-1", "2027-01-01T00:00:00Z", None)
