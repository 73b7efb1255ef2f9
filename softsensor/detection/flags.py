"""Fault flags as frozen values: what is believed of an instrument, since when, how large, how sure, and what else."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import UTC, datetime, timedelta
from typing import Literal

Kind = Literal["bias", "drift", "stuck", "noisy", "spike", "lost", "model"]
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


@dataclass(frozen=True, slots=True)
class Flag:
    """One fault with a life of its own; times in UTC microseconds, sizes in the tag's unit.

    size: the present bias where the kind is bias or drift (for a drift: reached at detection); nan where it means nothing.
    """

    flag: str
    tag: str
    kind: Kind
    onset: int
    detected: int
    cleared: int | None
    size: float
    size_sd: float
    probability: float
    group: tuple[str, ...]

    @property
    def isolated(self) -> bool:
        """The data name this instrument and no other."""
        return self.group == (self.tag,)

    def closed(self, time: int) -> Flag:
        """The flag, cleared at ``time``."""
        return replace(self, cleared=time)


@dataclass(frozen=True, slots=True)
class Exclusion:
    """A sensor kept from the estimate from one cycle on; ``until`` is the first cycle that uses it again."""

    sensor: int
    since: int
    until: int | None = None
    by_person: bool = False
    """Left out for work on it: its readings mean nothing, and no flag is opened on it."""

    def covers(self, cycle: int) -> bool:
        """Is the sensor kept out at this cycle?"""
        return self.since <= cycle and (self.until is None or cycle < self.until)


@dataclass(frozen=True, slots=True)
class Episode:
    """From the first test that goes up until all are down again: one disturbance, or one fault being diagnosed."""

    since: int
    """Cycle at which the first test went up."""
    noted: bool = False
    """The cause is on record as no fault of an instrument."""


@dataclass(frozen=True, slots=True)
class Rest:
    """A person's word that the plant is not as the model knows it: no tests of innovations before cycle ``until``."""

    until: int
    occasion: str


@dataclass(frozen=True, slots=True)
class Note:
    """An event worth a line on record that is not a flag."""

    time: int
    kind: str
    text: str


@dataclass(frozen=True, slots=True)
class FlagBook:
    """What is open at a cycle."""

    open: tuple[Flag, ...] = ()
    episode: Episode | None = None
    exclusions: tuple[Exclusion, ...] = ()
    rest: Rest | None = None

    def find(self, tag: str, kinds: tuple[Kind, ...]) -> Flag | None:
        """The open flag of a tag, of one of these kinds."""
        return next((flag for flag in self.open if flag.tag == tag and flag.kind in kinds), None)

    def doubted(self, cycle: int, sensors: tuple[str, ...]) -> tuple[Flag, ...]:
        """Open flags that speak against an instrument the estimate rests on at a cycle."""
        return tuple(
            flag
            for flag in self.open
            if flag.kind in ("bias", "drift", "stuck", "model")
            and not (flag.tag in sensors and self.excluded(sensors.index(flag.tag), cycle))
        )

    def excluded(self, sensor: int, cycle: int) -> bool:
        """Is a sensor kept from the estimate at a cycle?"""
        return any(item.sensor == sensor and item.covers(cycle) for item in self.exclusions)

    def worked_on(self, sensor: int, cycle: int) -> bool:
        """Has a person left the sensor out at a cycle?"""
        return any(
            item.sensor == sensor and item.by_person and item.covers(cycle) for item in self.exclusions
        )

    def resting(self, cycle: int) -> bool:
        """Do the unit's tests rest at a cycle because a person said so?"""
        return self.rest is not None and cycle < self.rest.until


def flag_name(unit: str, tag: str, kind: Kind, detected: int) -> str:
    """A name that the same fault has in every run of the same readings.

    >>> flag_name("R-210", "TI2101A", "drift", 1_700_000_000_000_000)
    'R-210 TI2101A drift 2023-11-14T22:13:20Z'
    """
    moment = EPOCH + timedelta(microseconds=detected)
    return f"{unit} {tag} {kind} {moment:%Y-%m-%dT%H:%M:%S}Z"
