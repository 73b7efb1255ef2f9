"""What a value in a model file may be: how it is read, and what is said where it is not that.

A ``Kind`` turns a TOML value into a checked one or refuses it. Its stand-in takes a refused value's place, so
that reading goes on to the next fault; nothing built with a stand-in leaves the package.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Generic, TypeVar

from plant_models import durations
from plant_models.errors import UnitError
from plant_models.quoting import quoted
from plant_models.specification import Range
from plant_models.units import EXPECTED as A_UNIT
from plant_models.units import parse_unit

T = TypeVar("T")

LONGEST = 1000 * 365.25 * 86400.0
"""The longest time that a model file may name, in seconds; with it times in microseconds stay 64-bit integers."""


class RefusalError(Exception):
    """A value that is not of its kind; the text says why where the expectation alone does not."""


@dataclass(frozen=True, slots=True)
class Kind(Generic[T]):
    """One kind of value.

    :ivar expected: completes the sentence "expected ...".
    :ivar convert: from the TOML value; raises RefusalError or UnitError.
    :ivar stand_in: what takes a refused value's place.
    """

    expected: str
    convert: Callable[[object], T]
    stand_in: T

    def refusal(self, value: object, reason: str) -> str:
        """The message for a refused value."""
        return f"expected {self.expected}; got {quoted(value)}{', ' if reason else ''}{reason}"


def _number(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise RefusalError("which is no number" if isinstance(value, str) else "")
    try:
        number = float(value)
    except OverflowError:
        raise RefusalError("which is too large") from None
    if not math.isfinite(number):
        raise RefusalError("")
    return number


def _above_zero(value: object) -> float:
    number = _number(value)
    if number <= 0.0:
        raise RefusalError("")
    return number


def _factor(value: object) -> float:
    number = _number(value)
    if number < 1.0:
        raise RefusalError("")
    return number


def _not_below_zero(value: object) -> float:
    number = _number(value)
    if number < 0.0:
        raise RefusalError("")
    return number


def _not_zero(value: object) -> float:
    number = _number(value)
    if number == 0.0:
        raise RefusalError("")
    return number


def _range(value: object) -> Range:
    if not isinstance(value, list) or len(value) != 2:
        raise RefusalError("")
    low, high = (_number(item) for item in value)
    if not low < high:
        raise RefusalError("where the first is not below the second")
    return (low, high)


def _numbers(value: object) -> tuple[float, ...]:
    if not isinstance(value, list) or not value:
        raise RefusalError("")
    return tuple(_number(item) for item in value)


def _lists_of_times(value: object) -> tuple[tuple[float, ...], ...]:
    if not isinstance(value, list):
        raise RefusalError("which is no list")
    lists: list[tuple[float, ...]] = []
    for place, item in enumerate(value, start=1):
        try:
            lists.append(_list_of(_positive_duration)(item))
        except RefusalError as error:
            raise RefusalError(f"where item {place} is not: {error}") from None
    return tuple(lists)


def _flag(value: object) -> bool:
    if not isinstance(value, bool):
        raise RefusalError("")
    return value


def _text(value: object) -> str:
    if not isinstance(value, str) or not value.strip() or not value.isprintable():
        raise RefusalError("")
    return value.strip()


def _name(value: object) -> str:
    """A tag or name: it becomes a column, a folder and part of lists, whose marks it must not contain."""
    text = _text(value)
    if text != value:
        raise RefusalError("which begins or ends with a space")
    if len(text) > 100:
        raise RefusalError("which is longer than 100 characters")
    if ";" in text or "->" in text:
        raise RefusalError("but ';' and '->' separate tags in results")
    if text == "time" or text.endswith(".quality"):
        raise RefusalError("which has a meaning of its own in history files")
    return text


def _unit(value: object) -> str:
    if not isinstance(value, str):
        raise RefusalError("")
    return parse_unit(value).text


def _duration(value: object) -> float:
    seconds = durations.parse_duration(value)
    if seconds > LONGEST:
        raise RefusalError("which is longer than a thousand years")
    return seconds


def _sample_time(value: object) -> float:
    """Cycles lie on whole microseconds, so the sample time is a whole number of them."""
    seconds = _positive_duration(value)
    if round(seconds * 1e6) / 1e6 != seconds:
        raise RefusalError("which is no whole number of microseconds")
    return seconds


def _positive_duration(value: object) -> float:
    seconds = _duration(value)
    if seconds == 0.0:
        raise RefusalError("")
    return seconds


def _lead_time(value: object) -> float:
    seconds = durations.parse_signed_duration(value)
    if abs(seconds) > LONGEST:
        raise RefusalError("which is longer than a thousand years")
    if seconds == 0.0:
        raise RefusalError("but a lead of zero does nothing")
    return seconds


def _list_of(convert: Callable[[object], float]) -> Callable[[object], tuple[float, ...]]:
    """A list, each item of which is converted; a refusal says which item."""

    def converted(value: object) -> tuple[float, ...]:
        if not isinstance(value, list):
            raise RefusalError("which is no list")
        items: list[float] = []
        for place, item in enumerate(value, start=1):
            try:
                items.append(convert(item))
            except (RefusalError, UnitError) as error:
                reason = f": {error}" if str(error) else ""
                raise RefusalError(f"where item {place} is not{reason}") from None
        return tuple(items)

    return converted


def _tags(value: object) -> tuple[str, ...]:
    if not isinstance(value, list):
        raise RefusalError("which is no list")
    tags = tuple(_name(item) for item in value)
    if len(set(tags)) < len(tags):
        raise RefusalError("which names a tag twice")
    return tags


TEXT = Kind("a text that is not empty", _text, "-")
TAG = Kind("a tag such as 'TI2101A'", _name, "-")
TAGS: Kind[tuple[str, ...]] = Kind("a list of tags such as ['TI2101A']", _tags, ())
NAME = Kind("a name such as 'feed concentration'", _name, "-")
INPUT_TAG = Kind("an input's tag", _name, "-")
SOURCE = Kind("an input's tag or a disturbance's name", _name, "-")
TARGET = Kind("a sensor's or an estimate's tag", _name, "-")
UNIT = Kind(A_UNIT, _unit, "-")
NUMBER = Kind("a finite number", _number, 1.0)
ABOVE_ZERO = Kind("a finite number above zero", _above_zero, 1.0)
FACTOR = Kind("a factor from 1 up", _factor, 1.0)
NOT_BELOW_ZERO = Kind("a finite number not below zero", _not_below_zero, 1.0)
NOT_ZERO = Kind("a finite number other than zero", _not_zero, 1.0)
RANGE = Kind("two finite numbers, the lower first, such as [0.0, 20.0]", _range, (0.0, 1.0))
COEFFICIENTS: Kind[tuple[float, ...]] = Kind(
    "a list of finite numbers in descending powers of s, such as [16.7, 1.0]", _numbers, (1.0,)
)
NUMBERS: Kind[tuple[float, ...]] = Kind("a list of finite numbers such as [8.0, 15.0]", _numbers, (0.0, 1.0))
FLAG = Kind("true or false", _flag, False)
DURATION = Kind(durations.EXPECTED, _duration, 1.0)
SAMPLE_TIME = Kind(f"{durations.EXPECTED}, above zero", _sample_time, 1.0)
DURATION_ABOVE_ZERO = Kind(f"{durations.EXPECTED}, above zero", _positive_duration, 1.0)
LATE_HORIZON: Kind[float | None] = Kind(f"{durations.EXPECTED}, above zero", _positive_duration, 1.0)
TIME_UNIT = Kind("a unit of time such as 'min'", durations.parse_time_unit, 1.0)
TIME_CONSTANTS: Kind[tuple[float, ...]] = Kind(
    "a list of times above zero, such as ['4.2 min', '0.6 min']", _list_of(_positive_duration), (1.0,)
)
TABLE_OF_TIMES: Kind[tuple[tuple[float, ...], ...]] = Kind(
    "a list of lists of times above zero such as [['5 min'], ['3 min']]", _lists_of_times, ()
)
LEAD_TIMES: Kind[tuple[float, ...]] = Kind(
    "a list of times other than zero, negative for inverse response, such as ['-0.5 min']",
    _list_of(_lead_time),
    (),
)
