"""When tests rested and why: because of a person's word, the plant's state, missing inputs, a start in a moving plant."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Select, or_, select, update

from softsensor.detection.flags import RestSpell
from softsensor.records.engine import Database
from softsensor.records.inserting import insert_or_replace
from softsensor.records.tables import rests


@dataclass(frozen=True, slots=True)
class StoredRest:
    """A time in which tests rested: of one sensor, or of all where the tag is empty. ``until_us`` None: no end is known."""

    cause: str
    tag: str
    since_us: int
    until_us: int | None
    why: str


def store_rests(connection: Connection, unit_id: int, spells: Sequence[RestSpell]) -> None:
    """Put these on record; one that is there already gets its new end. May be repeated."""
    newest = {(item.cause, item.tag, item.since): item for item in spells}
    rows = [
        {
            "unit_id": unit_id,
            "cause": item.cause,
            "tag": item.tag,
            "since_us": item.since,
            "until_us": item.until,
            "why": item.why,
        }
        for item in newest.values()
    ]
    insert_or_replace(connection, rests, rows)


def end_rests(connection: Connection, unit_id: int, time_us: int) -> int:
    """Whatever still rests at a time ends there: the run begins anew. Returns how many."""
    lasting = update(rests).where(rests.c.unit_id == unit_id, rests.c.since_us < time_us)
    lasting = lasting.where(or_(rests.c.until_us.is_(None), rests.c.until_us > time_us))
    return connection.execute(lasting.values(until_us=time_us)).rowcount


def rests_at(database: Database, unit_id: int, time_us: int) -> list[StoredRest]:
    """Why tests rest at a time, the oldest reason first."""
    query = select(rests).where(rests.c.unit_id == unit_id, rests.c.since_us <= time_us)
    return _rests(database, query.where(or_(rests.c.until_us.is_(None), rests.c.until_us > time_us)))


def rests_of(database: Database, unit_id: int) -> list[StoredRest]:
    """All times in which tests of a unit rested, the oldest first."""
    return _rests(database, select(rests).where(rests.c.unit_id == unit_id))


def _rests(database: Database, query: Select[Any]) -> list[StoredRest]:
    names = ("cause", "tag", "since_us", "until_us", "why")
    with database.read() as connection:
        rows = connection.execute(query.order_by(rests.c.since_us, rests.c.cause, rests.c.tag)).all()
    return [StoredRest(*(row._mapping[name] for name in names)) for row in rows]
