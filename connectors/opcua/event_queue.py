"""A bounded queue of a source's events between the connection and its one reader.

Policy when it is full: the oldest reading goes and the newest stays, because an estimator wants the present;
what went is counted and told as :class:`~connectors.events.ReadingsLost` before the next event. Changes of
the connection are never dropped before readings are.
"""

from __future__ import annotations

import asyncio
from collections import deque

from connectors.events import ReadingsLost, SourceEvent
from connectors.readings import Reading


class EventQueue:
    """Many putters on one event loop, one getter; putting never waits."""

    def __init__(self, size: int) -> None:
        if size < 1:
            raise ValueError(f"size {size}; expected at least 1")
        self._size = size
        self._events: deque[SourceEvent] = deque()
        self._lost = 0
        self._wake = asyncio.Event()
        self._closed = False
        self._failure: Exception | None = None

    @property
    def size(self) -> int:
        """How many events are kept at most."""
        return self._size

    def __len__(self) -> int:
        return len(self._events)

    def put(self, event: SourceEvent) -> None:
        """Add an event, making room by dropping the oldest reading where the queue is full."""
        if self._closed:
            return
        if len(self._events) >= self._size:
            self._drop_one()
        self._events.append(event)
        self._wake.set()

    def count_lost(self, count: int) -> None:
        """Note readings that were lost before they came here."""
        self._lost += count
        self._wake.set()

    def close(self, failure: Exception | None = None) -> None:
        """No more events; the reader gets those that are here, then the end or the failure."""
        if not self._closed:
            self._closed = True
            self._failure = failure
            self._wake.set()

    async def get(self) -> SourceEvent | None:
        """The next event, or None after the last.

        :raises Exception: the failure that the queue was closed with, after the last event.
        """
        while True:
            if self._lost:
                lost, self._lost = self._lost, 0
                return ReadingsLost(lost)
            if self._events:
                return self._events.popleft()
            if self._closed:
                if self._failure is not None:
                    raise self._failure
                return None
            self._wake.clear()
            await self._wake.wait()

    def _drop_one(self) -> None:
        for index, event in enumerate(self._events):
            if isinstance(event, Reading):
                del self._events[index]
                self._lost += 1
                return
        self._events.popleft()
