"""The service's clock, handed in: the wall's, or a simulated plant's that runs faster."""

from __future__ import annotations

import asyncio
import time
from dataclasses import dataclass
from typing import ClassVar, Protocol


class Clock(Protocol):
    """Plant time in UTC microseconds."""

    @property
    def known(self) -> bool:
        """Is plant time known yet? Until then :meth:`now` is the wall's time and no cycle runs."""
        ...

    def now(self) -> int:
        """The present plant time."""
        ...

    def observe(self, time: int) -> None:
        """A reading with this source timestamp has come."""
        ...

    def seconds_until(self, moment: int) -> float:
        """Seconds on the wall until a plant time; zero or less once it has passed."""
        ...

    def news(self) -> tuple[str, ...]:
        """What there is to tell about the clock since this was asked last."""
        ...


@dataclass(frozen=True, slots=True)
class SystemClock:
    """Plant time is the wall's time."""

    known: ClassVar[bool] = True

    def observe(self, time: int) -> None:
        """The wall's time does not depend on readings."""

    def now(self) -> int:
        return time.time_ns() // 1000

    def seconds_until(self, moment: int) -> float:
        return (moment - self.now()) * 1e-6

    def news(self) -> tuple[str, ...]:
        """Nothing: this clock does not judge."""
        return ()


@dataclass(frozen=True, slots=True)
class ScaledClock:
    """Plant time runs ``speed`` times as fast as the wall's from ``plant_start`` at ``wall_start`` (UTC microseconds)."""

    plant_start: int
    wall_start: int
    speed: float
    known: ClassVar[bool] = True

    def observe(self, time: int) -> None:
        """This clock does not depend on readings."""

    def now(self) -> int:
        elapsed = time.time_ns() // 1000 - self.wall_start
        return self.plant_start + round(elapsed * self.speed)

    def seconds_until(self, moment: int) -> float:
        return (moment - self.now()) * 1e-6 / self.speed

    def news(self) -> tuple[str, ...]:
        """Nothing: this clock does not judge."""
        return ()


class FollowingClock:
    """Plant time is the newest source timestamp that has come: for a simulated plant that runs ``speed`` times as fast."""

    def __init__(self, speed: float) -> None:
        self._speed = speed
        self._newest: int | None = None

    @property
    def known(self) -> bool:
        return self._newest is not None

    def observe(self, time: int) -> None:
        self._newest = time if self._newest is None else max(time, self._newest)

    def now(self) -> int:
        return SystemClock().now() if self._newest is None else self._newest

    def seconds_until(self, moment: int) -> float:
        return (moment - self.now()) * 1e-6 / self._speed

    def news(self) -> tuple[str, ...]:
        """Nothing: this clock does not judge."""
        return ()


async def wait_until(clock: Clock, moment: int) -> None:
    """Sleep until a plant time."""
    while (seconds := clock.seconds_until(moment)) > 0.0:
        await asyncio.sleep(min(seconds, 1.0))
