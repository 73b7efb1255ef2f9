"""What people decide about sensors and tests takes effect at a cycle, and a restart and a replay come to the same."""

from __future__ import annotations

import asyncio
import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pytest

from connectors.readings import Quality
from softsensor.alarms.sensor_status import SensorStatus, sensor_health
from softsensor.cycle import UnitDesign
from softsensor.detection.people import Decision
from softsensor.errors import RecordsError
from softsensor.estimation.lab_results import LabArrival
from softsensor.recorded_data import prepare_from_records
from softsensor.records import changes, decisions, reader, series
from softsensor.records.engine import Database, open_database
from softsensor.records.tables import decisions as table
from softsensor.records.writer import RecordsWriter
from softsensor.service.recording import pack_decisions, unpack_decisions
from softsensor.service.unit_run import Came
from softsensor.service.unit_service import UnitService

SUMS = 6
"""Columns of the record's sums that are sums: high and low of three sensors; probabilities follow."""

START, STEP, END = 1_796_083_200_000_000, 10_000_000, 400
MENDED = 320
"""Cycle at which TI1B reads right again."""

Act = Callable[[Database, int], None]


@dataclass
class PeopleBench:
    """A bench at which people decide something before some cycles: through the records, as the page does it."""

    bench: Any
    acts: Mapping[int, Act]
    done: set[int] = field(default_factory=set)
    health: dict[int, SensorStatus] = field(default_factory=dict)

    async def run(self, story: Any, first: int, stop: int, cut: bool = True) -> None:
        """As the bench runs, with the decisions before their cycles."""
        with open_database(self.bench.url) as database, RecordsWriter(database) as writer:
            service = self.bench.service(database, writer)
            service.resume()
            number = (service.coming_cycle(START + first * STEP) - START) // STEP
            for reading in story.shown_again(number):
                service.accept(reading, START + number * STEP - 500_000)
            while number < stop:
                self.decide(service, database, writer, number)
                await self.bench.cycle(service, story, number)
                book = service.run.state.book
                self.health[number] = sensor_health(book, "TI1B", book.worked_on(1, number))
                number += 1
            if cut and stop < END:
                self.decide(service, database, writer, stop)
                await self.bench.cut_short(service, story, stop)

    def decide(self, service: UnitService, database: Database, writer: RecordsWriter, number: int) -> None:
        if number in self.acts and number not in self.done:
            writer.flush(30.0)
            self.acts[number](database, service.identity.unit_id)
            self.done.add(number)
        for decision in service.waiting_decisions():
            service.take(decision)


def with_ti1b(story: Any, change: Callable[[int, Any], Any]) -> Any:
    arrivals = {
        cycle: [change(cycle, item) if item.tag == "TI1B" else item for item in items]
        for cycle, items in story.arrivals.items()
    }
    return type(story)(arrivals)


@pytest.fixture(scope="module")
def mended(story: Any) -> Any:
    """The story in which somebody mends TI1B at a cycle."""
    return with_ti1b(story, lambda k, item: replace(item, value=item.value - 1.5) if k >= MENDED else item)


def put_back(database: Database, unit: int) -> None:
    (flag,) = reader.flags_of(database, unit)
    changes.put_back(database, flag.id, "A. Müller", "new element", as_found=1.5, as_left=0.02)


def results_of(url: str) -> dict[str, Any]:
    with open_database(url) as database:
        unit = reader.find_unit(database, "R-1").id
        blocks = list(series.published(database, unit, 0, END - 1))
        names = ("estimate", "sd", "status", "used", "sums", "predicted")
        found: dict[str, Any] = {
            name: np.concatenate([getattr(block.results, name) for block in blocks]) for name in names
        }
        found["digests"] = [item.hex() for block in blocks for item in block.results.digests]
        found["flags"] = reader.flags_of(database, unit)
        found["left_out"] = decisions.left_out_of(database, unit)
        found["events"] = sorted(
            (item.event.time_us, item.event.kind, item.event.text) for item in reader.events_since(database)
        )
        found["waiting"] = decisions.waiting_decisions(database, unit)
        return found


def replayed(design: UnitDesign, url: str) -> str:
    running, _, _ = prepare_from_records(design.model, url, "R-1", None, None)
    assert sum(len(stretch.results) for stretch in running.stretches()) == END
    return running.digest


async def with_stops(bench: PeopleBench, story: Any, stops: tuple[int, ...]) -> None:
    first = 0
    for stop in (*stops, END):
        await bench.run(story, first, stop)
        first = stop


def test_a_sensor_put_back_counts_from_that_cycle_on_and_its_flag_is_cleared_and_kept(
    design: UnitDesign, new_bench: Any, mended: Any, sqlite_url: str
) -> None:
    bench = PeopleBench(new_bench(design, sqlite_url), {322: put_back})
    asyncio.run(bench.run(mended, 0, END))
    found = results_of(sqlite_url)
    (flag,) = found["flags"]
    now = START + 322 * STEP
    assert (flag.tag, flag.state, flag.cleared_us) == ("TI1B", "cleared", now)
    assert (flag.finding, flag.finding_by, flag.as_found, flag.as_left) == (
        "confirmed",
        "A. Müller",
        1.5,
        0.02,
    )
    (out,) = found["left_out"]
    assert (out.tag, out.until_us, out.by_person) == ("TI1B", now, False)
    assert out.since_us == flag.onset_us
    assert not found["used"][300:322, 1].any()
    assert found["used"][322:, 1].all()
    assert found["status"][321, 0] == 1
    assert found["status"][340, 0] == 0
    assert found["sums"][321, 1] > 1.0
    assert np.all(found["sums"][322, :SUMS] < 3.0)
    assert found["waiting"] == []
    assert bench.health[321] is SensorStatus.OUT_OF_SPECIFICATION
    assert bench.health[322] is SensorStatus.NORMAL
    told = [text for _, kind, text in found["events"] if kind == "put back"]
    assert sorted(told) == ["TI1B counts again", "TI1B is put back; A. Müller: new element"]


def test_the_trail_tells_who_put_it_back_and_what_was_found(
    design: UnitDesign, new_bench: Any, mended: Any, sqlite_url: str
) -> None:
    asyncio.run(PeopleBench(new_bench(design, sqlite_url), {322: put_back}).run(mended, 0, END))
    with open_database(sqlite_url) as database:
        entries = {item.action: item for item in reader.audit_entries(database)}
    assert (entries["sensor put back"].actor, entries["sensor put back"].reason) == (
        "A. Müller",
        "new element",
    )
    assert entries["sensor put back"].object == "sensor TI1B of unit R-1"
    assert json.loads(entries["finding"].after or "")["as_found"] == 1.5
    assert (entries["flag cleared"].actor, entries["flag cleared"].reason) == (
        "softsensor",
        "put back by A. Müller",
    )


def test_stops_around_a_put_back_change_nothing_and_a_replay_gives_the_digest(
    design: UnitDesign, new_bench: Any, mended: Any, sqlite_url: str, database_url: str
) -> None:
    asyncio.run(PeopleBench(new_bench(design, sqlite_url), EVERYTHING).run(mended, 0, END))
    stopped = PeopleBench(new_bench(design, database_url), EVERYTHING)
    asyncio.run(with_stops(stopped, mended, (60, 61, 85, 150, 170, 262, 322, 323, 360)))
    one, other = results_of(sqlite_url), results_of(database_url)
    for name in one:
        same = (
            np.array_equal(one[name], other[name], equal_nan=True)
            if isinstance(one[name], np.ndarray)
            else one[name] == other[name]
        )
        if name != "flags":
            assert same, name
    assert [(flag.id, flag.cleared_us) for flag in one["flags"]] == [
        (flag.id, flag.cleared_us) for flag in other["flags"]
    ]
    assert replayed(design, database_url) == replayed(design, sqlite_url) == one["digests"][-1]


def test_a_sensor_that_is_still_wrong_when_put_back_is_flagged_and_left_out_again(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    asyncio.run(PeopleBench(new_bench(design, sqlite_url), {300: put_back}).run(story, 0, END))
    found = results_of(sqlite_url)
    assert [(flag.tag, flag.state) for flag in found["flags"]] == [("TI1B", "open"), ("TI1B", "cleared")]
    assert found["flags"][0].onset_us >= START + 300 * STEP
    assert [out.until_us for out in found["left_out"]] == [None, START + 300 * STEP]
    assert replayed(design, sqlite_url) == found["digests"][-1]


def leave_out(database: Database, unit: int) -> None:
    changes.leave_out(database, unit, "TI1B", 195.0, "B", "cleaning the thermowell")


def rest(database: Database, unit: int) -> None:
    changes.rest_tests(database, unit, "grade change", 400.0, "C", "grade 7")


def go_on(database: Database, unit: int) -> None:
    changes.end_rest(database, unit, "C", "done sooner")


EVERYTHING = {60: leave_out, 150: rest, 170: go_on, 322: put_back}


def test_a_sensor_left_out_by_a_person_is_in_function_check_for_its_time_and_gets_no_flag(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    """It reads nonsense, then nothing, then one value over and over, and right again when the time is over."""

    def worked_on(k: int, item: Any) -> Any:
        if 60 <= k < 70:
            return replace(item, value=item.value + 40.0)
        if 70 <= k < 80:
            return replace(item, quality=Quality.BAD)
        return replace(item, value=item.value - 1.5) if k >= 240 else item

    sound = with_ti1b(story, worked_on)
    bench = PeopleBench(new_bench(design, sqlite_url), {60: leave_out})
    asyncio.run(bench.run(sound, 0, END))
    found = results_of(sqlite_url)
    assert found["flags"] == []
    assert not found["used"][60:80, 1].any()
    assert found["used"][80:, 1].all()
    assert found["used"][60:80, 2].all()
    in_check = [k for k, health in bench.health.items() if health is SensorStatus.FUNCTION_CHECK]
    assert in_check == list(range(60, 80))
    (out,) = found["left_out"]
    assert (out.since_us, out.until_us, out.by_person) == (START + 60 * STEP, START + 80 * STEP, True)
    assert found["status"][79, 0] == 1
    assert found["status"][81, 0] == 0
    told = [text for _, kind, text in found["events"] if "left out" in kind]
    assert told == ["TI1B is left out until 2026-12-01 00:13:20 UTC; B: cleaning the thermowell"]
    assert replayed(design, sqlite_url) == found["digests"][-1]


def test_without_the_leaving_out_the_same_readings_are_flagged(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    wrong = with_ti1b(story, lambda k, item: replace(item, value=item.value + 40.0) if 60 <= k < 70 else item)
    asyncio.run(PeopleBench(new_bench(design, sqlite_url), {}).run(wrong, 0, 100, cut=False))
    with open_database(sqlite_url) as database:
        assert "TI1B" in {flag.tag for flag in reader.flags_of(database)}


def test_a_rest_silences_the_tests_leaves_the_estimates_and_ends_by_itself(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str, database_url: str
) -> None:
    """The bias of the story comes at cycle 240: flagged without a rest, and only after it with one."""
    asyncio.run(PeopleBench(new_bench(design, sqlite_url), {}).run(story, 0, 290, cut=False))
    asyncio.run(PeopleBench(new_bench(design, database_url), {235: rest}).run(story, 0, END))
    with open_database(sqlite_url) as database:
        (untold,) = reader.flags_of(database)
        plain = next(iter(series.published(database, 1, 0, 289)))
    found = results_of(database_url)
    assert untold.detected_us < START + 275 * STEP
    assert found["flags"]
    assert all(flag.onset_us >= START + 275 * STEP for flag in found["flags"])
    assert not found["sums"][235:275, :SUMS].any()
    before = (untold.detected_us - START) // STEP
    assert np.array_equal(found["estimate"][235:before], plain.results.estimate[235:before])
    assert np.array_equal(found["status"][235:before], plain.results.status[235:before])
    told = [(time, text) for time, kind, text in found["events"] if kind == "rest" and "grade" in text]
    assert told == [
        (
            START + 235 * STEP,
            "grade change: the tests rest until 2026-12-01 00:45:50 UTC, the estimates go on; C: grade 7",
        ),
        (START + 275 * STEP, "grade change: the tests go on"),
    ]
    assert replayed(design, database_url) == found["digests"][-1]


def test_who_rests_is_known_while_it_lasts(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    bench = PeopleBench(new_bench(design, sqlite_url), {20: rest, 40: go_on})
    asyncio.run(bench.run(story, 0, 50, cut=False))
    with open_database(sqlite_url) as database:
        assert decisions.rest_at(database, 1, START + 45 * STEP) is None
        events = [item.event.text for item in reader.events_since(database) if "rest" in item.event.text]
    assert events[-1] == "grade change: the rest of the tests is ended; C: done sooner"
    other = PeopleBench(new_bench(design, sqlite_url), {52: rest})
    asyncio.run(other.run(story, 50, 60, cut=False))
    with open_database(sqlite_url) as database:
        found = decisions.rest_at(database, 1, START + 60 * STEP)
        assert found is not None
        assert (found.occasion, found.actor, found.until_us) == ("grade change", "C", START + 92 * STEP)
        assert decisions.rest_at(database, 1, START + 92 * STEP) is None


def test_a_decision_that_does_not_fit_changes_nothing_and_says_why(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    def odd(database: Database, unit: int) -> None:
        changes.end_leaving_out(database, unit, "TI1B", "B", "x")
        changes.end_rest(database, unit, "B", "x")
        changes.leave_out(database, unit, "TI99", 60.0, "B", "x")

    asyncio.run(PeopleBench(new_bench(design, sqlite_url), {20: odd}).run(story, 0, 30, cut=False))
    with open_database(sqlite_url) as database:
        assert decisions.waiting_decisions(database, 1) == []
        with database.read() as connection:
            refusals = [row.refusal for row in connection.execute(table.select()).all()]
    assert refusals == [
        "TI1B was in use already",
        "the tests were not at rest",
        "TI99 is no sensor of the model",
    ]


def test_what_came_before_a_cycle_survives_its_record() -> None:
    came: list[Came] = [
        LabArrival(0, "AL1", 5, 6, 0.1 + 0.2, 0.0),
        Decision(3, "leave out", "TI1B", "", "", 0.1 + 0.2, "Jürgen", 'a "reason"'),
        Decision(4, "rest", "", "", "start-up", 3600.0, "B", "x"),
    ]
    assert unpack_decisions(pack_decisions(came)) == came
    assert (pack_decisions([]), unpack_decisions(b"")) == (b"", [])
    assert unpack_decisions(pack_decisions(came[1:])) == came[1:]
    older = b'{"laboratory":[[0,"AL1",5,6,"0x1.0p+0",0.0,null]]}'
    assert unpack_decisions(older) == [LabArrival(0, "AL1", 5, 6, 1.0, 0.0, None)]


def test_another_revision_begins_anew_and_the_records_say_so(
    design: UnitDesign, other_design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    def both(database: Database, unit: int) -> None:
        leave_out(database, unit)
        rest(database, unit)

    first = PeopleBench(new_bench(design, sqlite_url), {120: both})
    asyncio.run(first.run(story, 0, 130, cut=False))
    asyncio.run(new_bench(other_design, sqlite_url).run(story, 130, 140, cut=False))
    with open_database(sqlite_url) as database:
        begun = START + 130 * STEP
        by_people = [item for item in decisions.left_out_of(database, 1) if item.by_person]
        assert [item.until_us for item in by_people] == [begun]
        assert decisions.rest_at(database, 1, begun) is None
        (told,) = [item.event for item in reader.events_since(database) if "begins anew" in item.event.text]
    assert told.time_us == begun


def test_a_put_back_needs_a_left_out_sensor_and_both_errors(
    design: UnitDesign, new_bench: Any, mended: Any, sqlite_url: str
) -> None:
    refused: list[str] = []

    def early(database: Database, unit: int) -> None:
        (flag,) = reader.flags_of(database, unit)
        for given in ({"as_found": 1.0}, {"finding": "maybe"}, {"as_found": float("nan"), "as_left": 0.0}):
            with pytest.raises(RecordsError) as raised:
                changes.put_back(database, flag.id, "A", "x", **given)
            refused.append(str(raised.value))
        changes.put_back(database, flag.id, "A", "x", finding="process change")
        with pytest.raises(RecordsError) as raised:
            changes.put_back(database, flag.id, "A", "x", finding="undecided")
        refused.append(str(raised.value))

    def late(database: Database, unit: int) -> None:
        with pytest.raises(RecordsError) as raised:
            put_back(database, unit)
        refused.append(str(raised.value))

    bench = PeopleBench(new_bench(design, sqlite_url), {322: early, 330: late})
    asyncio.run(bench.run(mended, 0, 335, cut=False))
    assert [text.split(":")[0] for text in refused] == [
        "a confirmed finding needs the errors as found and as left",
        "a finding cannot be 'maybe'; expected one of",
        "as found cannot be nan; expected a number in the unit of the tag",
        "TI1B is being put back already",
        "TI1B is not left out and its flag is not open",
    ]
    with open_database(sqlite_url) as database:
        (flag,) = reader.flags_of(database)
        assert (flag.finding, flag.as_found) == ("process change", None)


@pytest.mark.parametrize("seconds", [0.0, -1.0, float("nan"), 30.1 * 86400.0])
def test_a_time_limit_is_needed_and_has_an_end(database: Database, seconds: float) -> None:
    with pytest.raises(RecordsError, match="expected more than none, at most 30 days"):
        changes.leave_out(database, 1, "TI1", seconds, "A", "x")
    with pytest.raises(RecordsError, match="expected more than none, at most 30 days"):
        changes.rest_tests(database, 1, "shutdown", seconds, "A", "x")
    with pytest.raises(RecordsError, match="there is no unit 7"):
        changes.end_rest(database, 7, "A", "x")
    with pytest.raises(RecordsError, match="the occasion cannot be 'tea'"):
        changes.rest_tests(database, 1, "tea", 60.0, "A", "x")
    with pytest.raises(RecordsError, match="a reason is missing"):
        changes.leave_out(database, 1, "TI1", 60.0, "A", " ")
    assert reader.audit_entries(database) == []
