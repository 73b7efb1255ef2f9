"""A source and a sink in memory, with the faces of those to a plant: for tests, replays, demonstrations."""

from __future__ import annotations

from collections import deque
from collections.abc import AsyncIterator, Iterable
from types import TracebackType
from typing import Generic, TypeVar

from connectors.events import SourceEvent
from connectors.opcua.event_queue import EventQueue

Item = TypeVar("Item")
DEFAULT_QUEUE_SIZE = 20_000


class MemorySource:
    """Events that are put in by hand, read as from any other source::

        async with MemorySource([Reading("TI2101A", 92.4, 0)]) as source:
            source.put(Reading("TI2101A", 92.5, 10_000_000))
            source.finish()
            async for event in source.events():
                ...

    :param events: what waits from the start, in order.
    :param queue_size: events kept for the reader; beyond it the oldest reading is dropped, counted and told.
    """

    def __init__(self, events: Iterable[SourceEvent] = (), queue_size: int = DEFAULT_QUEUE_SIZE) -> None:
        self._queue = EventQueue(queue_size)
        for event in events:
            self._queue.put(event)

    async def __aenter__(self) -> MemorySource:
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None
    ) -> None:
        await self.close()

    def put(self, event: SourceEvent) -> None:
        """Add an event; never waits. On the event loop's own thread only."""
        self._queue.put(event)

    def finish(self, failure: Exception | None = None) -> None:
        """No more events: the reader gets those that wait, then the end, or ``failure`` raised."""
        self._queue.close(failure)

    async def close(self) -> None:
        """As :meth:`finish`; the name that every source has."""
        self._queue.close()

    async def events(self) -> AsyncIterator[SourceEvent]:
        """Everything that was put in, in order, until :meth:`finish` or :meth:`close`.

        :raises Exception: the failure that the source was finished with, after the last event.
        """
        while (event := await self._queue.get()) is not None:
            yield event


class MemorySink(Generic[Item]):
    """Keeps what is published, newest last.

    :param kept: how many items; beyond it the oldest go, and ``dropped`` says how many went.
    """

    def __init__(self, kept: int = 100_000) -> None:
        if kept < 1:
            raise ValueError(f"kept {kept}; expected at least 1")
        self._items: deque[Item] = deque(maxlen=kept)
        self._published = 0

    async def publish(self, item: Item) -> None:
        """Keep one item."""
        self._items.append(item)
        self._published += 1

    @property
    def published(self) -> tuple[Item, ...]:
        """What is kept, oldest first."""
        return tuple(self._items)

    @property
    def dropped(self) -> int:
        """How many items are no longer kept."""
        return self._published - len(self._items)
