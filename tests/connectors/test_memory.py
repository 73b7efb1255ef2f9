"""The source and the sink in memory."""

from __future__ import annotations

import asyncio

import pytest

from connectors.errors import PlantConnectionError
from connectors.events import ConnectionChange, ReadingsLost, SourceEvent
from connectors.memory import MemorySink, MemorySource
from connectors.readings import Reading


def reading(second: int) -> Reading:
    return Reading("TI1", 92.0 + second, second * 1_000_000)


async def everything(source: MemorySource) -> list[SourceEvent]:
    return [event async for event in source.events()]


def test_events_come_in_the_order_in_which_they_were_put() -> None:
    async def story() -> list[SourceEvent]:
        async with MemorySource([ConnectionChange("connected", "the test began"), reading(1)]) as source:
            source.put(reading(3))
            source.put(reading(2))
            source.finish()
            source.put(reading(4))
            return await everything(source)

    assert asyncio.run(story()) == [
        ConnectionChange("connected", "the test began"),
        reading(1),
        reading(3),
        reading(2),
    ]


def test_a_reader_that_waits_gets_what_is_put_later() -> None:
    async def put(source: MemorySource) -> None:
        source.put(reading(1))
        await source.close()

    async def story() -> list[SourceEvent]:
        source = MemorySource()
        taken, _ = await asyncio.gather(everything(source), put(source))
        return taken

    assert asyncio.run(story()) == [reading(1)]


def test_readings_beyond_the_queue_are_counted_and_told() -> None:
    async def story() -> list[SourceEvent]:
        source = MemorySource([reading(second) for second in range(5)], queue_size=2)
        source.finish()
        return await everything(source)

    assert asyncio.run(story()) == [ReadingsLost(3), reading(3), reading(4)]


def test_a_failure_is_raised_after_the_last_event() -> None:
    async def story() -> None:
        source = MemorySource([reading(1)])
        source.finish(PlantConnectionError("opc.tcp://plant: refused"))
        events = source.events()
        assert await anext(events) == reading(1)
        await anext(events)

    with pytest.raises(PlantConnectionError, match="refused"):
        asyncio.run(story())


def test_a_sink_keeps_the_newest_and_counts_the_rest() -> None:
    sink: MemorySink[int] = MemorySink(kept=2)

    async def story() -> None:
        for item in range(5):
            await sink.publish(item)

    asyncio.run(story())
    assert sink.published == (3, 4)
    assert sink.dropped == 3
    with pytest.raises(ValueError, match="at least 1"):
        MemorySink(kept=0)
