"""Readings that come after their cycles have run: where they belong, and those that are too old to be used."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from softsensor.estimation.kernel import Floats

Kind = Literal["input", "sensor"]


@dataclass(frozen=True, eq=False)
class LateReadings:
    """What past cycles see of one tag now that its late readings have come: processing in order would have given it.

    Shapes: times (N,) of the cycles, UTC microseconds, increasing; values (N,) in the tag's unit, nan where there is
    none; qualities (N,) codes of CycleQuality. ``column`` is the tag's place among inputs or sensors.
    """

    tag: str
    kind: Kind
    column: int
    times: NDArray[np.int64]
    values: Floats
    qualities: NDArray[np.int8]

    def only(self, chosen: NDArray[np.bool_]) -> LateReadings:
        """Some of the cycles."""
        times, values, qualities = self.times[chosen], self.values[chosen], self.qualities[chosen]
        return LateReadings(self.tag, self.kind, self.column, times, values, qualities)

    def as_bytes(self) -> bytes:
        """All of it, for the digest."""
        place = np.array([self.kind == "sensor", self.column, len(self.times)], dtype="<i8")
        parts = (self.times.astype("<i8"), self.values.astype("<f8"), self.qualities)
        return b"".join([place.tobytes(), *(part.tobytes() for part in parts)])


@dataclass(frozen=True, eq=False)
class UnusedReadings:
    """Late readings that are not used, and why; ``times`` (N,) are their own, ``qualities`` (N,) as they came."""

    tag: str
    times: NDArray[np.int64]
    values: Floats
    qualities: NDArray[np.int8]
    reason: str


def late_words(items: Sequence[LateReadings | UnusedReadings], now: int) -> list[str]:
    """What to tell about late readings that have come before the cycle at ``now``."""
    texts = []
    used = [item for item in items if isinstance(item, LateReadings) and len(item.times)]
    if used:
        tags = ", ".join(dict.fromkeys(item.tag for item in used))
        ago = (now - min(int(item.times[0]) for item in used)) * 1e-6
        texts.append(
            f"late readings of {tags}: the estimate has gone back {ago:.0f} s and forward again with them; "
            "what was published and flagged stays"
        )
    for item in items:
        if isinstance(item, UnusedReadings):
            age = (now - int(item.times[0])) * 1e-6
            count = f"{len(item.times)} late readings" if len(item.times) > 1 else "a late reading"
            texts.append(f"{count} of {item.tag}, up to {age:.0f} s old, not used: {item.reason}")
    return texts
