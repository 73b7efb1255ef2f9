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
    onset_from: int | None = None
    """The onset lies between this and ``onset_to`` with 95 %; None with an ``onset_to``: how long before cannot be told."""
    onset_to: int | None = None
    """None: the test that found the fault gives no such interval."""
    hypotheses: tuple[tuple[str, float], ...] = ()
    """What was weighed, with probabilities, the most probable first: names as in ``group``, and "nothing"."""

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
    state: str = ""
    """The plant state for which it is left out, where it is one and no person's word."""

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
    weighed: int = -1
    """Cycle at which gains of transfer functions were last weighed; -1: not yet."""
    explained_at: int = -1
    """Cycle at which an error known already was seen again, or gone back: that explains the sums for a while; -1: none."""


@dataclass(frozen=True, slots=True)
class Rest:
    """A person's word that the plant is not as the model knows it: no tests of innovations before cycle ``until``."""

    until: int
    occasion: str
    since: int = 0
    """Time at which it began, UTC microseconds."""
    why: str = ""


@dataclass(frozen=True, slots=True)
class HeldState:
    """A state of the plant in which its model does not hold: no tests of innovations while it lasts."""

    name: str
    condition: str
    why: str
    """The condition, the value that met it, and since when."""
    since: int
    """Time of the cycle at which it began to count, UTC microseconds."""
    until: int | None = None
    """First cycle at which the tests go on; None while the condition holds."""
    uncertain: bool = True
    """The estimates are Uncertain meanwhile."""

    @property
    def key(self) -> str:
        """What tells this state from the others of its unit."""
        return f"{self.name}: {self.condition}"

    def covers(self, cycle: int) -> bool:
        """Do the tests rest at this cycle because of it?"""
        return self.until is None or cycle < self.until


@dataclass(frozen=True, slots=True)
class RestSpell:
    """A time in which tests rest, for the records: of one sensor, or of all where ``tag`` is empty."""

    cause: str
    tag: str
    since: int
    until: int | None
    why: str


@dataclass(frozen=True, slots=True)
class Beginning:
    """A run began with inputs whose past is not known; cycles.

    A test that goes up before ``until`` on a sum that began to climb by ``onset_by`` says that the plant was moving.
    """

    onset_by: int
    until: int
    unsteady: bool = False
    """A test has said so: the tests of innovations rest until then."""


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
    states: tuple[HeldState, ...] = ()
    beginning: Beginning | None = None
    settling: RestSpell | None = None
    """The rest of the tests that missing inputs or an unsteady beginning have caused, while it lasts."""

    absorbed: tuple[str, ...] = ()
    """Names of open flags whose error the estimate follows: their sums are down, and that says nothing."""
    answered: tuple[Flag, ...] = ()
    """Flags that people have closed lately on instruments in use; see :mod:`softsensor.detection.absorbed_faults`."""

    weighed: tuple[float, ...] = ()
    """While a test is up: per sensor, the probability of a bias beyond the tolerance, by the latest look."""

    def find(self, tag: str, kinds: tuple[Kind, ...]) -> Flag | None:
        """The open flag of a tag, of one of these kinds."""
        return next((flag for flag in self.open if flag.tag == tag and flag.kind in kinds), None)

    def doubted(self, cycle: int, sensors: tuple[str, ...]) -> tuple[Flag, ...]:
        """Open flags that speak against an instrument the estimate rests on at a cycle."""
        return tuple(
            flag
            for flag in self.open
            if flag.kind in ("bias", "drift", "stuck", "noisy", "model")
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

    def waits(self, sensor: int, cycle: int) -> bool:
        """Has the sensor been left out after a flag, and waits to be put back?"""
        return any(
            item.sensor == sensor and item.covers(cycle) and not item.by_person and not item.state
            for item in self.exclusions
        )

    def resting(self, cycle: int) -> bool:
        """Do the unit's tests rest at a cycle because a person said so, or because of the plant's state?"""
        return self.rested(cycle) or any(state.covers(cycle) for state in self.states)

    def held(self, sensors: tuple[str, ...]) -> list[tuple[str, str]]:
        """The states of the plant that hold, each with the sensor that it concerns, empty for all."""
        whole = [(state.key, "") for state in self.states if state.until is None]
        return whole + [
            (item.state, sensors[item.sensor])
            for item in self.exclusions
            if item.state and item.until is None
        ]

    def unsteady(self, cycle: int) -> bool:
        """Do the tests rest at a cycle because the plant was moving when the run began?"""
        return self.beginning is not None and self.beginning.unsteady and cycle < self.beginning.until

    def rested(self, cycle: int) -> bool:
        """Do the unit's tests rest at a cycle because a person said so?"""
        return self.rest is not None and cycle < self.rest.until


def time_words(time: int) -> str:
    """A time for a line on record.

    >>> time_words(1_700_000_000_000_000)
    '2023-11-14 22:13:20 UTC'
    """
    return f"{EPOCH + timedelta(microseconds=time):%Y-%m-%d %H:%M:%S} UTC"


def flag_name(unit: str, tag: str, kind: Kind, detected: int) -> str:
    """A name that the same fault has in every run of the same readings.

    >>> flag_name("R-210", "TI2101A", "drift", 1_700_000_000_000_000)
    'R-210 TI2101A drift 2023-11-14T22:13:20Z'
    """
    moment = EPOCH + timedelta(microseconds=detected)
    return f"{unit} {tag} {kind} {moment:%Y-%m-%dT%H:%M:%S}Z"
