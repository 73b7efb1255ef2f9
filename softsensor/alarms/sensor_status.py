"""A sensor's status by NAMUR NE 107, from the flags that are open on it. A flag is a maintenance matter, not an alarm."""

from __future__ import annotations

from collections.abc import Iterable
from enum import Enum

from softsensor.detection.flags import FlagBook

PROBABLE = 10.0 / 11.0


class SensorStatus(Enum):
    """The four NE 107 signals and normal: name, letter, and the code of the DI DeviceHealthEnumeration (OPC UA Part 100)."""

    NORMAL = ("normal", "", 0)
    FAILURE = ("failure", "F", 1)
    FUNCTION_CHECK = ("function check", "C", 2)
    OUT_OF_SPECIFICATION = ("out of specification", "S", 3)
    MAINTENANCE_REQUIRED = ("maintenance required", "M", 4)

    def __init__(self, words: str, letter: str, code: int) -> None:
        self.words = words
        self.letter = letter
        self.code = code


def status_of(kind: str, probability: float, isolated: bool) -> SensorStatus:
    """The status that one flag gives: lost and stuck are failures, a named shift is out of specification, the rest asks
    for maintenance.

    >>> status_of("drift", 0.99, True).words, status_of("bias", 0.6, False).words
    ('out of specification', 'maintenance required')
    """
    if kind in ("lost", "stuck"):
        return SensorStatus.FAILURE
    if kind in ("bias", "drift") and isolated and probability >= PROBABLE:
        return SensorStatus.OUT_OF_SPECIFICATION
    return SensorStatus.MAINTENANCE_REQUIRED


SEVERITY = (
    SensorStatus.NORMAL,
    SensorStatus.MAINTENANCE_REQUIRED,
    SensorStatus.OUT_OF_SPECIFICATION,
    SensorStatus.FUNCTION_CHECK,
    SensorStatus.FAILURE,
)
"""From least to most severe, as in the device manuals quoted for NE 107 (edition 2006-06-12)."""


def most_severe(found: Iterable[SensorStatus], worked_on: bool, waits: bool) -> SensorStatus:
    """The status of a sensor from those that its open flags give.

    :param worked_on: a person has left it out, for work on it: function check.
    :param waits: it was left out after a flag and waits to be put back: maintenance required, also once the flag is
        cleared.
    """
    together = [*found]
    together += [SensorStatus.FUNCTION_CHECK] if worked_on else []
    together += [SensorStatus.MAINTENANCE_REQUIRED] if waits else []
    return max(together, key=SEVERITY.index, default=SensorStatus.NORMAL)


def sensor_health(book: FlagBook, tag: str, worked_on: bool = False, waits: bool = False) -> SensorStatus:
    """The most severe status that the open flags and its use give a sensor."""
    found = [status_of(flag.kind, flag.probability, flag.isolated) for flag in book.open if flag.tag == tag]
    return most_severe(found, worked_on, waits)
