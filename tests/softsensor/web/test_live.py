"""The stream of a page: few updates, the newest cycle, and no news of flags or results lost."""

from __future__ import annotations

import asyncio
import json
from typing import Any

from softsensor.service.live_feed import LiveFeed, News
from softsensor.web.live import TOLD, LiveStreams

UNIT = "R-210"


def cycle(number: int, unit: str = UNIT) -> News:
    return News(unit, "cycle", {"time": number * 10, "cycle": number, "estimates": {}, "sensors": {}})


def told(message: str) -> tuple[str, Any]:
    """Kind and body of one server-sent event."""
    assert message.endswith("\n\n")
    fields = dict(line.split(": ", 1) for line in message.strip().split("\n"))
    return fields["event"], json.loads(fields["data"])


async def opened(streams: LiveStreams) -> Any:
    """A stream that has said that it lives and listens to the feed."""
    stream = streams.updates(UNIT)
    kind, _ = told(await anext(stream))
    assert kind == "alive"
    await asyncio.sleep(0)
    return stream


def test_of_many_cycles_the_newest_is_told_and_how_many_were_passed_over() -> None:
    async def run() -> None:
        feed = LiveFeed()
        stream = await opened(LiveStreams(feed, interval=0.0))
        for number in range(24):
            feed.publish(cycle(number))
        feed.publish(cycle(99, "X-1"))
        await asyncio.sleep(0)
        kind, body = told(await anext(stream))
        assert kind == "update"
        assert (body["cycle"]["cycle"], body["skipped"], body["topics"]) == (23, 23, {})
        await stream.aclose()

    asyncio.run(run())


def test_a_page_that_does_not_read_loses_no_news_of_flags_and_results() -> None:
    async def run() -> None:
        feed = LiveFeed()
        stream = await opened(LiveStreams(feed, interval=0.0))
        for number in range(2000):
            feed.publish(cycle(number))
            if number % 10 == 0:
                feed.publish(News(UNIT, "flag", {"tag": "TI2101A", "number": number}))
            if number % 400 == 0:
                feed.publish(News(UNIT, "lab", {"tag": "AL2101"}))
            await asyncio.sleep(0)
        _, body = told(await anext(stream))
        assert body["cycle"]["cycle"] == 1999
        assert body["skipped"] == 1999
        assert body["topics"] == {"flag": 200, "lab": 5}
        assert len(body["news"]) == TOLD
        await stream.aclose()

    asyncio.run(run())


def test_updates_keep_their_distance() -> None:
    async def run() -> int:
        feed = LiveFeed()
        streams = LiveStreams(feed, interval=0.05)
        stream = await opened(streams)
        loop, messages = asyncio.get_running_loop(), 0
        end = loop.time() + 0.5

        async def busy_plant() -> None:
            number = 0
            while loop.time() < end:
                feed.publish(cycle(number))
                number += 1
                await asyncio.sleep(0)
            streams.close()

        plant = asyncio.create_task(busy_plant())
        async for _ in stream:
            messages += 1
        await plant
        return messages

    assert 2 <= asyncio.run(run()) <= 13


def test_silence_is_filled_with_signs_of_life() -> None:
    async def run() -> None:
        stream = await opened(LiveStreams(LiveFeed(), interval=0.0, heartbeat=0.01))
        for _ in range(3):
            assert told(await anext(stream)) == ("alive", {})
        await stream.aclose()

    asyncio.run(run())


def test_a_page_that_goes_leaves_the_feed() -> None:
    async def run() -> None:
        feed = LiveFeed()
        stream = await opened(LiveStreams(feed))
        others = len(asyncio.all_tasks())
        await stream.aclose()
        assert len(asyncio.all_tasks()) == others - 1
        feed.publish(cycle(1))

    asyncio.run(run())


def test_closing_ends_every_stream_and_those_to_come() -> None:
    async def run() -> None:
        streams = LiveStreams(LiveFeed(), heartbeat=60.0)
        stream = await opened(streams)
        waiting = asyncio.create_task(_rest(stream))
        await asyncio.sleep(0)
        streams.close()
        assert len(await asyncio.wait_for(waiting, 5.0)) == 1
        assert len(await asyncio.wait_for(_rest(streams.updates(UNIT)), 5.0)) == 1

    asyncio.run(run())


async def _rest(stream: Any) -> list[str]:
    return [message async for message in stream]
