"""The service's clock, handed in: the wall's, or a simulated plant's that runs faster."""

from __future__ import annotations

import asyncio
import time
from dataclasses import dataclass
from typing import Protocol


class Clock(Protocol):
    """Plant time in UTC microseconds."""

    def now(self) -> int:
        """The present plant time."""
        ...

    def seconds_until(self, moment: int) -> float:
        """Seconds on the wall until a plant time; zero or less once it has passed."""
        ...


@dataclass(frozen=True, slots=True)
class SystemClock:
    """Plant time is the wall's time."""

    def now(self) -> int:
        return time.time_ns() // 1000

    def seconds_until(self, moment: int) -> float:
        return (moment - self.now()) * 1e-6


@dataclass(frozen=True, slots=True)
class ScaledClock:
    """Plant time runs ``speed`` times as fast as the wall's from ``plant_start`` at ``wall_start`` (UTC microseconds)."""

    plant_start: int
    wall_start: int
    speed: float

    def now(self) -> int:
        elapsed = time.time_ns() // 1000 - self.wall_start
        return self.plant_start + round(elapsed * self.speed)

    def seconds_until(self, moment: int) -> float:
        return (moment - self.now()) * 1e-6 / self.speed


async def wait_until(clock: Clock, moment: int) -> None:
    """Sleep until a plant time."""
    while (seconds := clock.seconds_until(moment)) > 0.0:
        await asyncio.sleep(min(seconds, 1.0))
