"""The wall's clock, held steady where this machine's clock jumps and the plant's readings do not.

Cycles need a time that only grows. A machine's clock may be set back or forward by hand, by a time server, by a virtual
machine that was paused. Small differences are followed at once. After a jump of JUMP seconds or more there are two
counts: the machine's new time, and the time as it would be without the jump. The readings tell which one the plant goes
by: a source timestamp that lies within half the jump of one count speaks for it.

- While readings speak for the old count, it is kept.
- VOTES readings in a row for the new one, or none for either within PATIENCE seconds: the new one is taken. Cycles that
  lie behind it are run without readings; where it lies behind the cycles, they wait until it has come back.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import ClassVar

JUMP = 5.0
VOTES = 3
PATIENCE = 60.0


def _wall() -> int:
    return time.time_ns() // 1000


def _steady() -> int:
    return time.monotonic_ns() // 1000


class SteadyClock:
    """Plant time is the wall's time, jumps judged by the readings.

    :param wall: UTC microseconds by the machine's clock.
    :param steady: microseconds of a count that never jumps.
    """

    known: ClassVar[bool] = True

    def __init__(self, wall: Callable[[], int] = _wall, steady: Callable[[], int] = _steady) -> None:
        self._wall, self._steady = wall, steady
        self._ahead = wall() - steady()
        """The wall's time less the steady count, as it is taken for right."""
        self._jumped: int | None = None
        """The same by the machine's clock after a jump that is being judged."""
        self._evidence_by = 0
        self._votes = 0
        self._news: list[str] = []

    def now(self) -> int:
        """The present plant time."""
        steady = self._steady()
        ahead = self._wall() - steady
        if abs(ahead - self._ahead) < JUMP * 1e6:
            self._ahead = ahead
            self._jumped = None
        elif self._jumped is None or abs(ahead - self._jumped) >= JUMP * 1e6:
            self._jumped, self._votes = ahead, 0
            self._evidence_by = steady + round(PATIENCE * 1e6)
            self._tell(
                f"this machine's clock was set {_by(ahead - self._ahead)}; the readings tell whether to follow it"
            )
        elif steady > self._evidence_by:
            self._follow("no reading speaks against it")
        return steady + self._ahead

    def observe(self, time: int) -> None:
        """A reading with this source timestamp has come."""
        own = self.now()
        if self._jumped is None:
            return
        machine = own - self._ahead + self._jumped
        near = abs(self._jumped - self._ahead) / 2
        if abs(time - own) < near:
            self._votes = 0
            self._evidence_by = own - self._ahead + round(PATIENCE * 1e6)
        elif abs(time - machine) < near:
            self._votes += 1
            if self._votes >= VOTES:
                self._follow("the plant's readings do")

    def seconds_until(self, moment: int) -> float:
        """Seconds on the wall until a plant time; zero or less once it has passed."""
        return (moment - self.now()) * 1e-6

    def news(self) -> tuple[str, ...]:
        """What there is to tell since this was asked last."""
        told, self._news = tuple(self._news), []
        return told

    def _follow(self, why: str) -> None:
        assert self._jumped is not None
        by = self._jumped - self._ahead
        waits = (
            "; cycles wait until it has come back" if by < 0 else "; the cycles in between have no readings"
        )
        self._ahead, self._jumped = self._jumped, None
        self._tell(f"followed this machine's clock, which was set {_by(by)}: {why}{waits}")

    def _tell(self, text: str) -> None:
        self._news.append(text)


def _by(microseconds: int) -> str:
    return f"{'forward' if microseconds > 0 else 'back'} by {abs(microseconds) * 1e-6:.0f} s"
