"""Server-sent events: what changes on a unit, a few times a second, for one page that is open.

A page that reads slowly gets fewer, newer updates: of the cycles the latest wins, of everything else it is kept
that it happened, so that nothing about flags, laboratory results or the connection is lost.
"""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from contextlib import suppress
from dataclasses import dataclass, field
from typing import Any

from softsensor.service.live_feed import LiveFeed, News

INTERVAL = 0.25
"""Seconds between two updates at least."""
HEARTBEAT = 10.0
"""Seconds of silence after which the page is told that the stream lives."""
RETRY_MS = 2000
ALIVE = "event: alive\ndata: {}\n\n"
TOLD = 50
"""News besides cycles that one update carries in full; beyond that their topics alone."""


@dataclass
class Pending:
    """What has happened since the last update."""

    cycle: dict[str, Any] | None = None
    skipped: int = 0
    topics: dict[str, int] = field(default_factory=dict)
    told: list[dict[str, Any]] = field(default_factory=list)

    def add(self, news: News) -> None:
        """Take one piece of news in."""
        if news.topic == "cycle":
            self.skipped += self.cycle is not None
            self.cycle = news.body
            return
        self.topics[news.topic] = self.topics.get(news.topic, 0) + 1
        if len(self.told) < TOLD:
            self.told.append({"topic": news.topic, "body": news.body})

    @property
    def empty(self) -> bool:
        """Nothing has happened."""
        return self.cycle is None and not self.topics

    def message(self) -> str:
        """The update, as one server-sent event."""
        body = {"cycle": self.cycle, "skipped": self.skipped, "topics": self.topics, "news": self.told}
        return f"event: update\ndata: {json.dumps(body, allow_nan=False)}\n\n"


class Collector:
    """Takes a unit's news off the feed as they come, whether or not anybody reads them."""

    def __init__(self, feed: LiveFeed, unit: str) -> None:
        self._news = feed.subscribe()
        self._unit = unit
        self._pending = Pending()
        self._woken = asyncio.Event()
        self._task = asyncio.create_task(self._collect(), name=f"live page of {unit}")

    async def _collect(self) -> None:
        async for news in self._news:
            if news.unit == self._unit:
                self._pending.add(news)
                self._woken.set()

    def wake(self) -> None:
        """Let :meth:`take` return now."""
        self._woken.set()

    async def take(self, patience: float) -> Pending:
        """What has happened since the last call; waits up to ``patience`` seconds for something to happen."""
        with suppress(TimeoutError):
            await asyncio.wait_for(self._woken.wait(), patience)
        taken, self._pending = self._pending, Pending()
        self._woken.clear()
        return taken

    async def close(self) -> None:
        """Leave the feed."""
        self._task.cancel()
        with suppress(asyncio.CancelledError):
            await self._task


class LiveStreams:
    """The streams of all pages that are open."""

    def __init__(self, feed: LiveFeed, interval: float = INTERVAL, heartbeat: float = HEARTBEAT) -> None:
        self._feed = feed
        self._interval = interval
        self._heartbeat = heartbeat
        self._open: set[Collector] = set()
        self._closing = False

    async def updates(self, unit: str) -> AsyncIterator[str]:
        """The stream of one page, until it is given up or :meth:`close` is called."""
        collector = Collector(self._feed, unit)
        self._open.add(collector)
        try:
            yield f"retry: {RETRY_MS}\n{ALIVE}"
            while not self._closing:
                pending = await collector.take(self._heartbeat)
                yield ALIVE if pending.empty else pending.message()
                await asyncio.sleep(0.0 if self._closing else self._interval)
        finally:
            self._open.discard(collector)
            await collector.close()

    def close(self) -> None:
        """End every stream within one interval; those opened later end at once. On the loop's thread."""
        self._closing = True
        for collector in self._open:
            collector.wake()
