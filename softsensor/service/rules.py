"""The reading rules of a unit's tags, and what is carried from cycle to cycle."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from connectors.history import TagSeries
from plant_models.specification import UnitSpec
from plant_models.transform import Transform
from softsensor.service.reading_rules import BAD, NEVER, UNMAPPED, TagState
from softsensor.service.sample_grid import MICROSECONDS, sample_time_in_microseconds

NO_LIMIT = 2**62
"""A maximum age that nothing reaches, in microseconds."""


@dataclass(frozen=True, slots=True)
class TagRule:
    """How one tag's readings are taken: maximum age in microseconds, whether a reading counts once, and its transform, for
    which a value outside its domain is no reading.
    """

    tag: str
    max_age: int
    counts_once: bool
    transform: Transform | None = None


@dataclass(frozen=True, slots=True)
class AssemblyState:
    """What is carried on: the last cycle's time (NEVER before the first), a state per input and sensor."""

    last_cycle: int
    inputs: tuple[TagState, ...]
    sensors: tuple[TagState, ...]


@dataclass(frozen=True, slots=True)
class UnitRules:
    """The rules of a unit's tags, in the order of its model file; ``sample_time`` in microseconds."""

    sample_time: int
    inputs: tuple[TagRule, ...]
    sensors: tuple[TagRule, ...]

    @property
    def tags(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys(rule.tag for rule in self.inputs + self.sensors))

    def start(self) -> AssemblyState:
        """The state before any reading."""
        new = TagState()
        return AssemblyState(NEVER, (new,) * len(self.inputs), (new,) * len(self.sensors))


def rules_of(spec: UnitSpec) -> UnitRules:
    """The reading rules of a unit.

    :raises ReplayError: the sample time is not a whole number of microseconds.
    """
    sample_time = sample_time_in_microseconds(spec.sample_time)
    return UnitRules(
        sample_time,
        tuple(
            TagRule(item.tag, _age(item.max_age, 3 * sample_time), True, item.transform)
            for item in spec.inputs
        ),
        tuple(
            TagRule(
                item.tag,
                _age(item.max_age, NO_LIMIT if item.on_change else 3 * sample_time),
                not item.on_change,
                item.transform,
            )
            for item in spec.sensors
        ),
    )


def mapped(rule: TagRule, new: TagSeries) -> NDArray[np.int8]:
    """The readings' qualities; UNMAPPED where the tag's transform has no value for a reading that is finite and not Bad."""
    if rule.transform is None:
        return new.qualities
    unmapped = np.isfinite(new.values) & (new.qualities < BAD) & ~rule.transform.holds(new.values)
    return np.where(unmapped, np.int8(UNMAPPED), new.qualities).astype(np.int8)


def _age(seconds: float | None, default: int) -> int:
    """A maximum age in microseconds; an age beyond all times is no limit."""
    if seconds is None:
        return default
    return NO_LIMIT if seconds * MICROSECONDS >= NO_LIMIT else round(seconds * MICROSECONDS)
