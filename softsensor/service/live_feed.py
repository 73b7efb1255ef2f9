"""What has just happened, for whoever is looking: pages and the console. Lossy by design; the records are not."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from dataclasses import dataclass
from typing import Any, Literal

Topic = Literal["cycle", "flag", "lab", "event", "connection"]
QUEUE = 256


@dataclass(frozen=True, slots=True)
class News:
    """One thing that happened. ``body`` is plain JSON-ready data.

    - ``cycle``: ``{"time": us, "cycle": n, "estimates": {tag: {"value", "sd", "lower", "upper", "status", "reason"}},
      "sensors": {tag: {"reading", "predicted", "health"}}}``, nan as None;
    - ``flag``: the flag's columns; ``lab``: the outcome's columns; ``event``: ``{"time": us, "kind": text, "text": text}``;
    - ``connection``: ``{"time": us, "state": "connected" | "disconnected", "reason": text}``.
    """

    unit: str
    topic: Topic
    body: dict[str, Any]


class LiveFeed:
    """Hands news to every subscriber; a subscriber too slow to follow loses the oldest."""

    def __init__(self) -> None:
        self._queues: set[asyncio.Queue[News]] = set()

    def publish(self, news: News) -> None:
        """Tell all subscribers; must be called on the event loop's thread."""
        for queue in self._queues:
            if queue.full():
                queue.get_nowait()
            queue.put_nowait(news)

    async def subscribe(self) -> AsyncIterator[News]:
        """News from now on, until the iteration is given up."""
        queue: asyncio.Queue[News] = asyncio.Queue(QUEUE)
        self._queues.add(queue)
        try:
            while True:
                yield await queue.get()
        finally:
            self._queues.discard(queue)
