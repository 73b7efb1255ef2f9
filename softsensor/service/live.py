"""The service: readings from the plant to the units, cycles on time, results to records, publishers and pages."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator, Mapping, Sequence
from dataclasses import replace
from typing import Protocol

from connectors.events import ConnectionChange, ReadingsLost, SourceEvent
from connectors.readings import Reading
from softsensor.records import happenings
from softsensor.records.errors import DatabaseAwayError
from softsensor.records.writer import RecordsWriter, WriterState
from softsensor.service.clock import Clock
from softsensor.service.live_feed import LiveFeed, News
from softsensor.service.news import cycle_news, flag_news, lab_news
from softsensor.service.recording import Step
from softsensor.service.unit_service import UnitService

GRACE = 2.0
"""Seconds on the wall that a cycle waits for tags that have not been heard yet."""
LOOK = 0.02
"""Seconds between two looks at whether a cycle may run."""
DECISIONS_EVERY = 2.0
STOP_LOOK = 0.5


class Source(Protocol):
    """Where readings come from."""

    def events(self) -> AsyncIterator[SourceEvent]:
        """Readings and what happens to the connection, until closed."""
        ...


class Sink(Protocol):
    """Where a unit's results go besides the records."""

    async def begin(self, unit: UnitService) -> None:
        """A unit has resumed."""
        ...

    async def publish(self, unit: UnitService, step: Step) -> None:
        """One cycle's outcome."""
        ...


class LiveService:
    """All units of a site on one source. :meth:`serve` runs until cancelled.

    :param routes: for each name that the source uses, the unit and the tag that it stands for.
    """

    def __init__(
        self,
        units: Sequence[UnitService],
        source: Source,
        routes: Mapping[str, tuple[str, str]],
        clock: Clock,
        writer: RecordsWriter,
        sinks: Sequence[Sink] = (),
        grace: float = GRACE,
    ) -> None:
        self._units = units
        self._source = source
        self._routes = {key: (self._named(units, unit), tag) for key, (unit, tag) in routes.items()}
        self._clock = clock
        self._writer = writer
        self._sinks = sinks
        self._grace = grace
        self._stopping = False
        self.feed = LiveFeed()
        self.connected = False

    @staticmethod
    def _named(units: Sequence[UnitService], name: str) -> UnitService:
        return next(unit for unit in units if unit.name == name)

    def stop(self) -> None:
        """End :meth:`serve` after the cycles under way: every cycle whose readings are on record gets its results."""
        self._stopping = True

    async def serve(self) -> None:
        """Resume every unit, then read, run and publish until :meth:`stop`.

        :raises RecordsError: the records refuse a write for good.
        """
        for unit in self._units:
            again = unit.resume()
            if again:
                self._event(unit, "restart", f"{again} recorded cycles ran again after the last checkpoint")
            for sink in self._sinks:
                await sink.begin(unit)
        async with asyncio.TaskGroup() as tasks:
            watching = [tasks.create_task(self._read()), tasks.create_task(self._watch_records())]
            watching += [tasks.create_task(self._watch_decisions(unit)) for unit in self._units]
            running = [tasks.create_task(self._run_unit(unit)) for unit in self._units]
            await asyncio.gather(*running)
            for task in watching:
                task.cancel()

    async def _read(self) -> None:
        async for event in self._source.events():
            if isinstance(event, Reading):
                unit, tag = self._routes[event.tag]
                if unit.drives_clock(tag):
                    self._clock.observe(event.time)
                unit.accept(replace(event, tag=tag), self._clock.now())
            elif isinstance(event, ConnectionChange):
                self.connected = event.state == "connected"
                self._tell_all("connection", f"{event.state}: {event.reason}")
                for each in self._units:
                    body = {"time": self._clock.now(), "state": event.state, "reason": event.reason}
                    self.feed.publish(News(each.name, "connection", body))
            elif isinstance(event, ReadingsLost):
                self._tell_all("lost readings", f"{event.count} readings came faster than they were taken")

    async def _run_unit(self, unit: UnitService) -> None:
        while not self._clock.known:
            await asyncio.sleep(LOOK)
            if self._stopping:
                return
        while True:
            moment = unit.coming_cycle(self._clock.now())
            while not self._stopping and self._clock.seconds_until(moment) > 0.0:
                await asyncio.sleep(min(self._clock.seconds_until(moment), STOP_LOOK))
            await self._wait_for_readings(unit, moment)
            if self._stopping:
                return
            step = await unit.run_cycle(moment)
            if step is not None:
                await self._publish(unit, step)

    async def _wait_for_readings(self, unit: UnitService, moment: int) -> None:
        """Until every tag has been heard to the cycle's time, or the grace is over."""
        while (
            not self._stopping
            and unit.complete_to() < moment
            and self._clock.seconds_until(moment) > -self._grace
        ):
            await asyncio.sleep(LOOK)
        await asyncio.sleep(0)

    async def _publish(self, unit: UnitService, step: Step) -> None:
        self.feed.publish(cycle_news(unit.design, step))
        for flag in step.results.flags:
            self.feed.publish(flag_news(unit.name, flag))
        for lab in step.labs:
            self.feed.publish(lab_news(unit.name, lab))
        for note in step.results.notes:
            body = {"time": note.time, "kind": note.kind, "text": note.text}
            self.feed.publish(News(unit.name, "event", body))
        for sink in self._sinks:
            await sink.publish(unit, step)

    async def _watch_records(self) -> None:
        """Say when the records fall behind and when they have caught up; end when they have failed for good."""
        waiting = False
        while True:
            report = self._writer.report()
            if report.state is WriterState.FAILED:
                self._writer.flush(0.0)
            behind = report.state is WriterState.WAITING
            if behind != waiting:
                waiting = behind
                self._tell_and_show("records", f"waiting: {report.why}" if behind else "caught up")
            for text in self._clock.news():
                self._tell_and_show("clock", text)
            await asyncio.sleep(0.5)

    async def _watch_decisions(self, unit: UnitService) -> None:
        """What people decide reaches the unit: laboratory results to use, sensors, tests; once the database can be asked."""
        taken: set[int] = set()
        while True:
            try:
                rows = await asyncio.to_thread(unit.decided_labs)
                decisions = await asyncio.to_thread(unit.waiting_decisions)
            except DatabaseAwayError:  # said by _watch_records
                rows, decisions = [], []
            for decision in decisions:
                unit.take(decision)
            for row, arrival in rows:
                if row not in taken:
                    taken.add(row)
                    unit.decide(arrival, self._clock.now())
            await asyncio.sleep(DECISIONS_EVERY)

    def _tell_and_show(self, kind: str, text: str) -> None:
        self._tell_all(kind, text)
        for unit in self._units:
            body = {"time": self._clock.now(), "kind": kind, "text": text}
            self.feed.publish(News(unit.name, "event", body))

    def _tell_all(self, kind: str, text: str) -> None:
        for unit in self._units:
            self._event(unit, kind, text)

    def _event(self, unit: UnitService, kind: str, text: str) -> None:
        event = happenings.Event(unit.identity.unit_id, self._clock.now(), kind, text)
        self._writer.submit(happenings.record_event, event)
