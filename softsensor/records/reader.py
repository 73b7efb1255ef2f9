"""What pages and the service ask of the records: units, flags, laboratory results, events, the audit trail.

Each function opens a read transaction of its own and raises DatabaseAwayError while the database is away. The
cycles themselves are in ``softsensor.records.series``.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Row, Select, select

from softsensor.errors import RecordsError
from softsensor.records.audit import StoredEntry
from softsensor.records.engine import Database
from softsensor.records.happenings import Event
from softsensor.records.tables import (
    audit_trail,
    events,
    flag_comments,
    flags,
    lab_results,
    model_revisions,
    units,
)


@dataclass(frozen=True, slots=True)
class Unit:
    """A unit on record."""

    id: int
    name: str
    title: str
    created_us: int


@dataclass(frozen=True, slots=True)
class StoredRevision:
    """A revision of a unit's model on record."""

    id: int
    unit_id: int
    digest: str
    file_text: str
    arrays: bytes
    created_us: int
    state: str
    actor: str


@dataclass(frozen=True, slots=True)
class StoredFlag:
    """A flag on record, with what people did about it. None where nothing is known or was done."""

    id: str
    unit_id: int
    tag: str
    kind: str
    onset_us: int
    detected_us: int
    cleared_us: int | None
    size: float | None
    size_sd: float | None
    probability: float | None
    group: tuple[str, ...]
    state: str
    acknowledged_us: int | None
    acknowledged_by: str | None
    finding: str | None
    finding_us: int | None
    finding_by: str | None
    as_found: float | None
    as_left: float | None
    onset_from_us: int | None = None
    onset_to_us: int | None = None
    hypotheses: tuple[tuple[str, float], ...] = ()


@dataclass(frozen=True, slots=True)
class Comment:
    """What someone wrote about a flag."""

    time_us: int
    actor: str
    text: str


@dataclass(frozen=True, slots=True)
class StoredLab:
    """A laboratory result on record, with what became of it."""

    id: int
    unit_id: int
    tag: str
    sampled_us: int
    reported_us: int
    value: float
    time_uncertainty: float
    arrived_cycle: int | None
    counted_cycle: int | None
    predicted: float | None
    innovation: float | None
    sd: float | None
    status: str
    reason: str
    revises: int | None
    decided_us: int | None
    decided_by: str | None


@dataclass(frozen=True, slots=True)
class StoredEvent:
    """An event on record; ``id`` grows from event to event."""

    id: int
    event: Event


def _rows(database: Database, query: Select[Any]) -> list[Row[Any]]:
    with database.read() as connection:
        return list(connection.execute(query).all())


def all_units(database: Database) -> list[Unit]:
    """Every unit, by name."""
    return [Unit(**row._mapping) for row in _rows(database, select(units).order_by(units.c.name))]


def find_unit(database: Database, name: str) -> Unit:
    """The unit of this name.

    :raises RecordsError: there is none; names those there are.
    """
    there = all_units(database)
    for unit in there:
        if unit.name == name:
            return unit
    names = ", ".join(unit.name for unit in there) or "none"
    raise RecordsError(f"the database {database.name} holds no unit {name}; there are: {names}")


def revisions_of(database: Database, unit_id: int) -> list[StoredRevision]:
    """Every revision of a unit, oldest first."""
    query = select(model_revisions).where(model_revisions.c.unit_id == unit_id)
    return [StoredRevision(**row._mapping) for row in _rows(database, query.order_by(model_revisions.c.id))]


def flags_of(
    database: Database, unit_id: int | None = None, state: str | None = None, limit: int = 1000
) -> list[StoredFlag]:
    """Flags of one unit or all, open or cleared or both; the newest first, at most ``limit``."""
    query = select(flags).order_by(flags.c.detected_us.desc(), flags.c.id).limit(limit)
    if unit_id is not None:
        query = query.where(flags.c.unit_id == unit_id)
    if state is not None:
        query = query.where(flags.c.state == state)
    return [_flag(row) for row in _rows(database, query)]


def flag_with_comments(database: Database, flag_id: str) -> tuple[StoredFlag, tuple[Comment, ...]]:
    """One flag and what was written about it, oldest first.

    :raises RecordsError: there is no such flag.
    """
    remarks = (
        select(flag_comments.c.time_us, flag_comments.c.actor, flag_comments.c.text)
        .where(flag_comments.c.flag_id == flag_id)
        .order_by(flag_comments.c.id)
    )
    with database.read() as connection:
        row = connection.execute(select(flags).where(flags.c.id == flag_id)).one_or_none()
        written = connection.execute(remarks).all()
    if row is None:
        raise RecordsError(f"there is no flag {flag_id}")
    return _flag(row), tuple(Comment(**remark._mapping) for remark in written)


def _flag(row: Row[Any]) -> StoredFlag:
    values = dict(row._mapping)
    values["group"] = tuple(values["group"].split("; ")) if values["group"] else ()
    weighed = json.loads(values["hypotheses"]) if values["hypotheses"] else []
    values["hypotheses"] = tuple((str(name), float(probability)) for name, probability in weighed)
    return StoredFlag(**values)


def lab_results_of(
    database: Database, unit_id: int, from_us: int | None = None, to_us: int | None = None
) -> list[StoredLab]:
    """Laboratory results of a unit sampled at ``from_us <= time < to_us``, in the order of sampling."""
    query = select(lab_results).where(lab_results.c.unit_id == unit_id)
    if from_us is not None:
        query = query.where(lab_results.c.sampled_us >= from_us)
    if to_us is not None:
        query = query.where(lab_results.c.sampled_us < to_us)
    query = query.order_by(lab_results.c.sampled_us, lab_results.c.id)
    return [StoredLab(**row._mapping) for row in _rows(database, query)]


def events_since(
    database: Database, after: int = 0, unit_id: int | None = None, limit: int = 1000
) -> list[StoredEvent]:
    """Events whose id is beyond ``after``, oldest first; of one unit, or all."""
    query = select(events).where(events.c.id > after).order_by(events.c.id).limit(limit)
    if unit_id is not None:
        query = query.where(events.c.unit_id == unit_id)
    found = []
    for row in _rows(database, query):
        values = dict(row._mapping)
        found.append(StoredEvent(values.pop("id"), Event(**values)))
    return found


def latest_events(database: Database, unit_id: int | None = None, limit: int = 100) -> list[StoredEvent]:
    """The newest events, newest first; of one unit, or all."""
    query = select(events).order_by(events.c.id.desc()).limit(limit)
    if unit_id is not None:
        query = query.where(events.c.unit_id == unit_id)
    found = []
    for row in _rows(database, query):
        values = dict(row._mapping)
        found.append(StoredEvent(values.pop("id"), Event(**values)))
    return found


def audit_entries(database: Database, after: int = 0, limit: int = 100) -> list[StoredEntry]:
    """Entries of the audit trail whose sequence is beyond ``after``, oldest first."""
    query = select(audit_trail).where(audit_trail.c.sequence > after)
    return [
        StoredEntry(**row._mapping)
        for row in _rows(database, query.order_by(audit_trail.c.sequence).limit(limit))
    ]


def latest_audit_entries(
    database: Database, before: int | None = None, limit: int = 100
) -> list[StoredEntry]:
    """The newest entries of the audit trail, newest first; of those before a sequence, or of all."""
    query = select(audit_trail).order_by(audit_trail.c.sequence.desc()).limit(limit)
    if before is not None:
        query = query.where(audit_trail.c.sequence < before)
    return [StoredEntry(**row._mapping) for row in _rows(database, query)]
