"""The bounded queue between a connection and its reader: oldest readings go first, and are counted."""

from __future__ import annotations

import asyncio

import pytest
from hypothesis import given
from hypothesis import strategies as st

from connectors.events import ConnectionChange, ReadingsLost, SourceEvent
from connectors.opcua.event_queue import EventQueue
from connectors.readings import Reading


async def drain(queue: EventQueue) -> list[SourceEvent]:
    events: list[SourceEvent] = []
    while (event := await queue.get()) is not None:
        events.append(event)
    return events


@given(size=st.integers(1, 20), count=st.integers(0, 60))
def test_the_newest_stay_and_the_rest_is_counted(size: int, count: int) -> None:
    async def scenario() -> list[SourceEvent]:
        queue = EventQueue(size)
        for number in range(count):
            queue.put(Reading("TI", float(number), number))
        queue.close()
        return await drain(queue)

    events = asyncio.run(scenario())
    kept = [event.time for event in events if isinstance(event, Reading)]
    lost = [event.count for event in events if isinstance(event, ReadingsLost)]
    assert kept == list(range(max(0, count - size), count))
    assert sum(lost) == max(0, count - size)
    assert lost == [] or isinstance(events[0], ReadingsLost)


def test_what_happened_to_the_connection_outlives_readings() -> None:
    async def scenario() -> list[SourceEvent]:
        queue = EventQueue(3)
        queue.put(ConnectionChange("connected", "one"))
        for number in range(5):
            queue.put(Reading("TI", float(number), number))
        queue.put(ConnectionChange("disconnected", "two"))
        queue.close()
        return await drain(queue)

    lost, first, reading, last = asyncio.run(scenario())
    assert lost == ReadingsLost(4)
    assert first == ConnectionChange("connected", "one")
    assert isinstance(reading, Reading)
    assert reading.time == 4
    assert last == ConnectionChange("disconnected", "two")


def test_a_waiting_reader_is_woken_by_an_event_and_by_the_end() -> None:
    async def scenario() -> tuple[SourceEvent | None, SourceEvent | None]:
        queue = EventQueue(3)
        waiting = asyncio.create_task(queue.get())
        await asyncio.sleep(0)
        queue.put(Reading("TI", 1.0, 1))
        first = await waiting
        waiting = asyncio.create_task(queue.get())
        await asyncio.sleep(0)
        queue.close()
        return first, await waiting

    assert asyncio.run(scenario()) == (Reading("TI", 1.0, 1), None)


def test_a_failure_reaches_the_reader_after_what_is_queued() -> None:
    async def scenario() -> None:
        queue = EventQueue(3)
        queue.put(Reading("TI", 1.0, 1))
        queue.close(OSError("broken"))
        assert await queue.get() == Reading("TI", 1.0, 1)
        with pytest.raises(OSError, match="broken"):
            await queue.get()

    asyncio.run(scenario())
