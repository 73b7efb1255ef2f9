"""The service while it runs: the plant away and back, readings lost, a person's decision, the database away and back."""

from __future__ import annotations

import asyncio
import itertools
import time
from collections.abc import AsyncIterator, Callable
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from typing import Any

import pytest

from connectors.events import ConnectionChange, ReadingsLost
from connectors.memory import MemorySource
from connectors.readings import Quality, Reading
from softsensor.cycle import UnitDesign
from softsensor.recorded_data import prepare_from_records
from softsensor.records import audit, changes, decisions, reader, series
from softsensor.records.engine import Database, open_database
from softsensor.records.upgrade import upgrade_database
from softsensor.records.writer import RecordsWriter
from softsensor.service.clock import Clock, FollowingClock, ScaledClock
from softsensor.service.live import LiveService
from softsensor.service.live_feed import News
from softsensor.service.recording import Step
from softsensor.service.result_tables import reasons
from softsensor.service.steady_clock import SteadyClock
from softsensor.service.unit_service import UnitService

START = 1_796_083_200_000_000
STEP = 10_000_000
DEADLINE = 60.0
TAGS = ("FI1", "TI9", "TI1A", "TI1B", "TI2", "AL1")


@dataclass
class Steps:
    """A sink that keeps every step and lets a test wait for one."""

    taken: list[Step] = field(default_factory=list)
    changed: asyncio.Condition = field(default_factory=asyncio.Condition)

    async def begin(self, unit: UnitService) -> None:
        """Nothing to prepare."""

    async def publish(self, unit: UnitService, step: Step) -> None:
        async with self.changed:
            self.taken.append(step)
            self.changed.notify_all()

    async def until(self, holds: Callable[[list[Step]], bool]) -> None:
        """Wait until something holds of the steps so far."""
        async with asyncio.timeout(DEADLINE), self.changed:
            await self.changed.wait_for(lambda: holds(self.taken))


@dataclass
class Running:
    """A service under way on one unit, and all that a test turns."""

    service: LiveService
    unit: UnitService
    database: Database
    writer: RecordsWriter
    source: MemorySource
    steps: Steps
    news: list[News] = field(default_factory=list)

    def tell(self, cycle: int, tags: tuple[str, ...] = TAGS[:5]) -> None:
        """Readings at the operating point, with a little life in them, one second before a cycle."""
        points = {"FI1": 11.5, "TI9": 60.0, "TI1A": 92.4, "TI1B": 92.4, "TI2": 80.0}
        for number, tag in enumerate(tags):
            value = points[tag] + (0.0 if number < 2 else 0.05 * ((cycle * 7 + number * 3) % 11 - 5))
            self.source.put(Reading(f"plant {tag}", value, START + cycle * STEP - 1_000_000))

    async def begin(self) -> None:
        """The readings before the first cycle, until the service has set its time."""
        self.tell(0)
        async with asyncio.timeout(DEADLINE):
            while self.unit.next_time is None:
                await asyncio.sleep(0)

    async def run_to(self, cycle: int, tags: tuple[str, ...] = TAGS[:5]) -> None:
        """Readings up to a cycle's successor, one cycle at a time, until the cycle has run."""
        first = len(self.steps.taken)
        for number in range(first, cycle + 1):
            self.tell(number + 1, tags)
            await self.steps.until(lambda taken, number=number: len(taken) > number)  # type: ignore[misc]


@asynccontextmanager
async def running(bench: Any, clock: Clock) -> AsyncIterator[Running]:
    """The service of a bench, ended in order."""
    with open_database(bench.url, clock.now) as database, RecordsWriter(database) as writer:
        unit, source, steps = bench.service(database, writer), MemorySource(), Steps()
        routes = {f"plant {tag}": ("R-1", tag) for tag in TAGS}
        service = LiveService([unit], source, routes, clock, writer, [steps], grace=0.0)
        site = Running(service, unit, database, writer, source, steps)

        async def listen() -> None:
            async for item in service.feed.subscribe():
                site.news.append(item)

        serving, listening = asyncio.create_task(service.serve()), asyncio.create_task(listen())
        try:
            yield site
            assert not serving.done(), serving.exception()
        finally:
            service.stop()
            await asyncio.wait([serving], timeout=DEADLINE)
            listening.cancel()
        serving.result()


def events(database: Database, kind: str) -> list[str]:
    return [item.event.text for item in reader.events_since(database) if item.event.kind == kind]


def digests(url: str) -> list[str]:
    """Recorded digests, cycle by cycle from the first, without a hole."""
    with open_database(url) as database:
        unit = reader.find_unit(database, "R-1").id
        blocks = list(series.published(database, unit, 0, 10_000))
        assert len(blocks) == 1
        assert blocks[0].results.first_cycle == 0
        return [item.hex() for item in blocks[0].results.digests]


def replayed_digest(design: UnitDesign, url: str) -> str:
    run, _, _ = prepare_from_records(design.model, url, "R-1", None, None)
    for _ in run.stretches():
        pass
    return run.digest


@pytest.fixture
def at_work(new_bench: Any, design: UnitDesign, sqlite_url: str) -> Any:
    """A bench on SQLite."""
    return new_bench(design, sqlite_url)


def uncertain(design: UnitDesign, step: Step) -> str:
    return str(reasons(design, step.readings, step.results)[0, 0])


def test_the_plant_away_and_back(at_work: Any, design: UnitDesign) -> None:
    """Cycles go on with held inputs; once these are too old the estimate is Uncertain and says which; then Good again."""

    async def story() -> list[Step]:
        clock = ScaledClock(START, time.time_ns() // 1000, 200.0)
        async with running(at_work, clock) as site:
            site.source.put(ConnectionChange("connected", "reading 6 of 6 tags"))
            site.tell(0)
            site.source.put(Reading("plant FI1", 11.5, clock.now()))
            site.source.put(Reading("plant TI9", 60.0, clock.now()))
            await site.steps.until(lambda taken: bool(taken))
            site.source.put(ConnectionChange("disconnected", "the server closed the connection"))
            site.source.put(ReadingsLost(7))
            await site.steps.until(
                lambda taken: len(taken) > 5 and "FI1 is too old" in uncertain(design, taken[-1])
            )
            assert "TI9 is too old, its last value is held" in uncertain(design, site.steps.taken[-1])
            assert not site.service.connected
            site.source.put(ConnectionChange("connected", "reading 6 of 6 tags"))
            ahead = clock.now() + 20 * STEP
            for tag, value in (("FI1", 11.5), ("TI9", 60.0)):
                for number in range(20):
                    site.source.put(Reading(f"plant {tag}", value, ahead - number * STEP))
            await site.steps.until(lambda taken: taken[-1].results.status[0, 0] == 0)
            assert site.service.connected
            site.writer.flush(DEADLINE)
            assert events(site.database, "connection") == [
                "connected: reading 6 of 6 tags",
                "disconnected: the server closed the connection",
                "connected: reading 6 of 6 tags",
            ]
            assert events(site.database, "lost readings") == ["7 readings came faster than they were taken"]
            told = [item.body["state"] for item in site.news if item.topic == "connection"]
            assert told == ["connected", "disconnected", "connected"]
            return site.steps.taken

    steps = asyncio.run(story())
    assert [step.results.first for step in steps] == list(range(len(steps)))
    assert {int(b.readings.times[0] - a.readings.times[0]) for a, b in itertools.pairwise(steps)} == {STEP}
    recorded = digests(at_work.url)
    assert recorded[: len(steps)] == [step.digest.hex() for step in steps]
    assert replayed_digest(design, at_work.url) == recorded[-1]


def test_a_result_that_a_person_decides_to_use_counts_once_and_is_replayed(
    at_work: Any, design: UnitDesign
) -> None:
    wrong = Reading("plant AL1", 2.4, START + 50_000_000 - 1_000_000)

    async def story() -> tuple[list[Step], int]:
        async with running(at_work, FollowingClock(1000.0)) as site:
            await site.begin()
            await site.run_to(9)
            site.source.put(wrong)
            await site.run_to(14)
            site.source.put(ConnectionChange("connected", "again"))
            site.source.put(wrong)
            site.source.put(Reading("plant AL1", float("nan"), START + 60_000_000, Quality.BAD))
            await site.run_to(19)
            site.writer.flush(DEADLINE)
            (lab,) = reader.lab_results_of(site.database, site.unit.identity.unit_id)
            assert (lab.status, lab.counted_cycle) == ("waiting for a person", None)
            changes.decide_lab(site.database, lab.id, "use", "an engineer", "measured again, the same")
            last = 20
            while not any(o.status == "used" for step in site.steps.taken for o in step.labs):
                await site.run_to(last)
                last += 1
                assert last < 5000
            decided = len(site.steps.taken) - 1
            site.source.put(wrong)
            await site.run_to(decided + 5)
            return list(site.steps.taken), decided

    steps, decided = asyncio.run(story())
    arrived = [(step.results.first, outcome.status) for step in steps for outcome in step.labs]
    assert [status for _, status in arrived] == ["waiting for a person", "used"]
    assert arrived[1][0] == decided > 20
    assert steps[decided].revisions[0].first == 5
    with open_database(at_work.url) as database:
        (lab,) = reader.lab_results_of(database, 1)
        assert (lab.status, lab.counted_cycle, lab.decided_by) == ("used", 5, "an engineer")
        assert lab.reason == "measured again, the same"
        assert audit.verify(database).whole
    recorded = digests(at_work.url)
    assert recorded[decided] == steps[decided].digest.hex()
    assert replayed_digest(design, at_work.url) == recorded[-1]


@pytest.fixture
def own_postgres(postgres_server: Any) -> tuple[Any, str]:
    """A server that may be killed, and the address of a database on it."""
    url = postgres_server.url.render_as_string(hide_password=False)
    upgrade_database(url)
    return postgres_server, url


def test_the_database_away_and_back(
    own_postgres: tuple[Any, str], new_bench: Any, design: UnitDesign
) -> None:
    """Estimates go on while it is away; afterwards every cycle is on record, in order, none missing."""
    server, url = own_postgres
    bench = new_bench(design, url)

    async def story() -> list[Step]:
        async with running(bench, FollowingClock(1000.0)) as site:
            await site.begin()
            await site.run_to(9)
            site.writer.flush(DEADLINE)
            await asyncio.to_thread(server.kill)
            await site.run_to(80)
            assert site.writer.report().queued > 0
            assert site.unit.records_late
            await asyncio.to_thread(server.start)
            assert await asyncio.to_thread(site.writer.flush, DEADLINE)
            await site.run_to(90)
            assert await asyncio.to_thread(site.writer.flush, DEADLINE)
            assert not site.unit.records_late
            said = events(site.database, "records")
            assert said[0].startswith("waiting: the database ")
            return list(site.steps.taken)

    steps = asyncio.run(story())
    recorded = digests(url)
    assert recorded[: len(steps)] == [step.digest.hex() for step in steps]
    assert replayed_digest(design, url) == recorded[-1]
    with open_database(url) as database:
        assert audit.verify(database).whole


def test_what_people_decide_about_sensors_and_tests_reaches_a_running_unit_once_and_is_replayed(
    at_work: Any, design: UnitDesign
) -> None:
    async def story() -> list[Step]:
        async with running(at_work, FollowingClock(1000.0)) as site:
            await site.begin()
            await site.run_to(9)
            unit = site.unit.identity.unit_id
            changes.leave_out(site.database, unit, "TI1B", 200.0, "a fitter", "cleaning")
            changes.rest_tests(site.database, unit, "grade change", 100.0, "an operator", "grade 7")
            last = 10
            while sum(len(step.taken) for step in site.steps.taken) < 2:
                await site.run_to(last)
                last += 1
                assert last < 5000
            await site.run_to(last + 25)
            site.writer.flush(DEADLINE)
            assert decisions.waiting_decisions(site.database, unit) == []
            told = [item.body["text"] for item in site.news if item.topic == "event"]
            assert [text.split(";")[-1].strip() for text in told if "until" in text and ";" in text] == [
                "a fitter: cleaning",
                "an operator: grade 7",
            ]
            assert {"grade change: the tests go on", "TI1B counts again"} <= set(told)
            return list(site.steps.taken)

    steps = asyncio.run(story())
    assert [item.decision.act for step in steps for item in step.taken] == ["leave out", "rest"]
    at = next(step.results.first for step in steps if step.taken)
    assert [step.results.first for step in steps if step.results.left_out[0, 1]] == list(range(at, at + 20))
    assert replayed_digest(design, at_work.url) == digests(at_work.url)[-1]


def test_a_machine_s_clock_that_is_set_back_stops_no_cycle_while_the_plant_goes_on(at_work: Any) -> None:
    """An hour back before cycle 4; the readings keep their time, and so do the cycles."""
    steady, ahead = 0, START - STEP

    async def story() -> list[Step]:
        nonlocal steady, ahead
        clock = SteadyClock(lambda: steady + ahead, lambda: steady)
        async with running(at_work, clock) as site:
            async with asyncio.timeout(DEADLINE):
                while site.unit.next_time is None:
                    await asyncio.sleep(0)
            for cycle in range(9):
                if cycle == 4:
                    ahead -= 3600 * 1_000_000
                site.tell(cycle)
                steady = (cycle + 1) * STEP + 100_000
                await site.steps.until(lambda taken, cycle=cycle: len(taken) > cycle)  # type: ignore[misc]
            async with asyncio.timeout(DEADLINE):
                while not any(item.body.get("kind") == "clock" for item in site.news):
                    await asyncio.sleep(0)
            site.writer.flush(DEADLINE)
            (text,) = events(site.database, "clock")
            assert text.startswith("this machine's clock was set back by 3600 s; the readings tell")
            return list(site.steps.taken)

    steps = asyncio.run(story())
    assert [int(step.results.times[0]) for step in steps] == [START + k * STEP for k in range(9)]
    assert all(step.results.used[0].all() for step in steps)


def test_cycles_that_a_clock_has_jumped_over_are_run_without_readings(
    at_work: Any, design: UnitDesign
) -> None:
    """Machine and plant are set forward by 200 s before cycle 4: cycles 4 to 23 have no readings, none is left out."""
    steady, ahead, jump = 0, START - STEP, 20

    async def story() -> list[Step]:
        nonlocal steady, ahead
        clock = SteadyClock(lambda: steady + ahead, lambda: steady)
        async with running(at_work, clock) as site:
            async with asyncio.timeout(DEADLINE):
                while site.unit.next_time is None:
                    await asyncio.sleep(0)
            for cycle in (0, 1, 2, 3):
                site.tell(cycle)
                steady = (cycle + 1) * STEP + 100_000
                await site.steps.until(lambda taken, cycle=cycle: len(taken) > cycle)  # type: ignore[misc]
            ahead += jump * STEP
            site.tell(4 + jump)
            steady += STEP
            await site.steps.until(lambda taken: len(taken) > 4 + jump)
            site.writer.flush(DEADLINE)
            return list(site.steps.taken)

    steps = asyncio.run(story())
    assert [int(step.results.times[0]) for step in steps] == [START + k * STEP for k in range(5 + jump)]
    assert [bool(step.results.used.any()) for step in steps] == [True] * 4 + [False] * jump + [True]
    assert replayed_digest(design, at_work.url) == digests(at_work.url)[-1]
