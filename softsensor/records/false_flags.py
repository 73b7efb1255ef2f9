"""How often flags were false, from the findings that people entered, over the time in which tests really watched."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from scipy.stats import chi2
from sqlalchemy import func, select

from softsensor.records.engine import Database
from softsensor.records.rests import StoredRest, rests_of
from softsensor.records.tables import cycles, flags

TESTED_KINDS = ("bias", "drift", "noisy")
"""Kinds of flags that the promise of a sensor's tests is about."""
FALSE = ("not confirmed", "process change")
"""Findings that say that the instrument was not at fault."""


@dataclass(frozen=True, slots=True)
class Achieved:
    """One sensor's flags and the time watched, in seconds.

    :param undecided: flags without a finding, or found undecided.
    """

    tag: str
    flags: int
    confirmed: int
    false: int
    undecided: int
    watched: float

    @property
    def interval(self) -> float | None:
        """Time between false flags; None where there was none."""
        return self.watched / self.false if self.false else None

    @property
    def least(self) -> float:
        """Lower 95 % bound of the time between false flags, every undecided flag taken as false."""
        return self.watched / garwood(self.false + self.undecided)[1]

    @property
    def most(self) -> float | None:
        """Upper 95 % bound, every undecided flag taken as true; None where there is none."""
        low = garwood(self.false)[0]
        return self.watched / low if low > 0.0 else None


def garwood(count: int) -> tuple[float, float]:
    """Exact 95 % interval of a Poisson mean from one count (Garwood 1936).

    >>> [round(bound, 3) for bound in garwood(0)], [round(bound, 3) for bound in garwood(10)]
    ([0.0, 3.689], [4.795, 18.39])
    """
    low = float(chi2.ppf(0.025, 2 * count)) / 2.0 if count else 0.0
    return low, float(chi2.ppf(0.975, 2 * (count + 1))) / 2.0


def achieved(
    database: Database,
    unit_id: int,
    tags: Iterable[str],
    revisions: Mapping[int, tuple[float, frozenset[str]]],
) -> list[Achieved]:
    """What became of each sensor's flags, in the order of the tags.

    :param revisions: by id, the sample time in seconds and the sensors whose tests were disarmed.
    """
    found = _findings(database, unit_id)
    rests = rests_of(database, unit_id)
    rows = []
    for tag in tags:
        counts = found.get(tag, {})
        total, confirmed = sum(counts.values()), counts.get("confirmed", 0)
        false = sum(counts.get(word, 0) for word in FALSE)
        watched = _watched(database, unit_id, tag, rests, revisions)
        rows.append(Achieved(tag, total, confirmed, false, total - confirmed - false, watched))
    return rows


def _findings(database: Database, unit_id: int) -> dict[str, dict[str, int]]:
    query = select(flags.c.tag, flags.c.finding, func.count().label("number"))
    query = query.where(flags.c.unit_id == unit_id, flags.c.kind.in_(TESTED_KINDS))
    found: dict[str, dict[str, int]] = {}
    with database.read() as connection:
        for row in connection.execute(query.group_by(flags.c.tag, flags.c.finding)):
            counts, word = found.setdefault(row.tag, {}), row.finding or "undecided"
            counts[word] = counts.get(word, 0) + int(row.number)
    return found


def _watched(
    database: Database,
    unit_id: int,
    tag: str,
    rests: Iterable[StoredRest],
    revisions: Mapping[int, tuple[float, frozenset[str]]],
) -> float:
    """Seconds of cycles in which the sensor's tests ran: armed, and not at rest."""
    query = select(cycles.c.revision_id, func.count().label("number")).where(cycles.c.unit_id == unit_id)
    spells = merged(rest for rest in rests if rest.tag in ("", tag))
    counts: dict[int, int] = {}
    with database.read() as connection:
        for row in connection.execute(query.group_by(cycles.c.revision_id)):
            counts[row.revision_id] = int(row.number)
        for since, until in spells:
            within = query.where(cycles.c.time_us >= since)
            within = within if until is None else within.where(cycles.c.time_us < until)
            for row in connection.execute(within.group_by(cycles.c.revision_id)):
                counts[row.revision_id] -= int(row.number)
    return sum(
        count * revisions[revision][0]
        for revision, count in counts.items()
        if revision in revisions and tag not in revisions[revision][1]
    )


def merged(rests: Iterable[StoredRest]) -> list[tuple[int, int | None]]:
    """Times at rest that do not overlap, in order; the last may have no end."""
    out: list[tuple[int, int | None]] = []
    for rest in sorted(rests, key=lambda item: item.since_us):
        if out and (out[-1][1] is None or rest.since_us <= out[-1][1]):
            last = out[-1][1]
            longer = None if last is None or rest.until_us is None else max(last, rest.until_us)
            out[-1] = (out[-1][0], longer)
        else:
            out.append((rest.since_us, rest.until_us))
    return out
