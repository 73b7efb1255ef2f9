"""What a source tells besides readings: its connection came or went, or readings were lost on the way."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from connectors.readings import Reading


@dataclass(frozen=True, slots=True)
class ConnectionChange:
    """The connection to the plant was made or lost; ``reason`` is one plain sentence for the event record."""

    state: Literal["connected", "disconnected"]
    reason: str


@dataclass(frozen=True, slots=True)
class ReadingsLost:
    """Readings that came faster than they were taken and were dropped, oldest first; never silently."""

    count: int


SourceEvent = Reading | ConnectionChange | ReadingsLost
"""What ``async for event in source.events()`` yields, for every source."""
