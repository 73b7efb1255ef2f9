"""Numbers, times and codes as the pages say them."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta
from urllib.parse import quote

from plant_models.number_text import plain
from plant_models.units import difference_unit as difference_unit

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
STATUS_WORDS = ("Good", "Uncertain", "Bad")
QUALITY_WORDS = ("Good", "Uncertain", "Bad", "no value yet", "too old", "outside its transform")
"""Words for the codes of :class:`softsensor.readings_of_cycle.CycleQuality`, of an input's value."""
MOST_DECIMALS = 6
OLDER_WORDS = {"suppression": "rest"}
"""Kinds of events as earlier releases put them on record."""


def moment(us: int) -> datetime:
    """A time of the records, UTC microseconds since 1970, as an aware time."""
    return EPOCH + timedelta(microseconds=us)


def iso(us: int) -> str:
    """ISO 8601 in UTC, to the millisecond.

    >>> iso(1_796_083_200_500_000)
    '2026-12-01T00:00:00.500Z'
    """
    return f"{moment(us):%Y-%m-%dT%H:%M:%S}.{us // 1000 % 1000:03d}Z"


def utc(us: int) -> str:
    """A time as read where no script shows it locally.

    >>> utc(1_796_083_200_000_000)
    '2026-12-01 00:00:00 UTC'
    """
    return f"{moment(us):%Y-%m-%d %H:%M:%S} UTC"


def clock(us: int) -> str:
    """The time of day beside a time that names the day.

    >>> clock(1_796_083_200_000_000)
    '00:00:00'
    """
    return f"{moment(us):%H:%M:%S}"


def decimals_for(resolution: float) -> int:
    """Decimals that show a third of ``resolution``; the same for every value of a tag, so that digits do not jump.

    >>> decimals_for(0.15), decimals_for(0.02), decimals_for(0.06), decimals_for(40.0)
    (2, 3, 2, 0)
    """
    if not (math.isfinite(resolution) and resolution > 0.0):
        return 3
    return min(max(math.ceil(-math.log10(resolution / 3.0)), 0), MOST_DECIMALS)


def number(value: float | None, decimals: int, sign: bool = False) -> str:
    """A number with fixed decimals, or ``none``.

    >>> number(1.3249, 3), number(None, 2), number(0.5, 1, sign=True)
    ('1.325', 'none', '+0.5')
    """
    if value is None or not math.isfinite(value):
        return "none"
    return f"{value:{'+' if sign else ''}.{decimals}f}"


def short(value: float | None, digits: int = 3) -> str:
    """A number with so many significant digits, or ``none``.

    >>> short(1268.0), short(0.5), short(None)
    ('1,270', '0.5', 'none')
    """
    return "none" if value is None or not math.isfinite(value) else plain(value, digits)


def percent(probability: float | None) -> str:
    """A probability in words that do not claim certainty.

    >>> percent(0.974), percent(0.9999), percent(None)
    ('97 %', 'over 99 %', 'not known')
    """
    if probability is None:
        return "not known"
    if probability > 0.99:
        return "over 99 %"
    return "under 1 %" if probability < 0.01 else f"{100.0 * probability:.0f} %"


def share(probability: float) -> str:
    """A probability beside others, to a tenth of a percent.

    >>> share(0.985), share(0.0004), share(0.99999)
    ('98.5 %', 'below 0.1 %', 'above 99.9 %')
    """
    if probability < 0.001:
        return "below 0.1 %"
    return "above 99.9 %" if probability > 0.999 else f"{100.0 * probability:.1f} %"


def duration(seconds: float) -> str:
    """A duration in the largest unit that keeps it above one.

    >>> duration(42.0), duration(300.0), duration(9000.0)
    ('42 s', '5 min', '2.5 h')
    """
    for size, unit in ((86400.0, "d"), (3600.0, "h"), (60.0, "min")):
        if abs(seconds) >= size:
            return f"{seconds / size:.1f}".removesuffix(".0") + f" {unit}"
    return f"{seconds:.0f} s"


def address(part: str) -> str:
    """Text as one part of an address: flag ids hold blanks, colons and more."""
    return quote(part, safe="")


def event_words(kind: str) -> str:
    """The kind of an event, in the word of today where earlier releases had another.

    >>> event_words("suppression"), event_words("connection")
    ('rest', 'connection')
    """
    return OLDER_WORDS.get(kind, kind)


def group_words(tag: str, group: tuple[str, ...]) -> str:
    """What the data can say about which instrument it is.

    >>> group_words("A", ("A",)), group_words("A", ("A", "B", "C"))
    ('named alone', 'cannot be told apart from B, C')
    """
    others = [name for name in group if name != tag]
    return "cannot be told apart from " + ", ".join(others) if others else "named alone"
