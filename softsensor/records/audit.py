"""The audit trail: who did what to what, when and why; each entry's hash covers the entry before.

::

    hash(n) = SHA-256( hash(n-1) as 32 bytes + canonical form of entry n in UTF-8 ),   hash(0) = 32 zero bytes

The canonical form is the JSON object of sequence, time_us, actor, action, object, before, after and reason
with its keys sorted, no spaces, no escapes but those that JSON demands, and numbers as Python's ``repr``
gives them. ``before`` and ``after`` are JSON texts in the same form, or null.

Triggers refuse to change an entry, and :func:`verify` finds a change made behind their back. What it cannot
find without a hash kept elsewhere: an owner of the database who drops the triggers and rewrites every entry
from some point on, or cuts off the newest entries, *and* adapts ``schema_info``. Keep the head that
``softsensor audit verify --json`` prints outside the database, and hand it back with ``--expect-head``.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, insert, select, text, update

from softsensor.errors import AuditTrailBroken, RecordsError
from softsensor.records.engine import Database
from softsensor.records.tables import audit_trail, schema_info

NO_HASH = "0" * 64
PROGRAM = "softsensor"
"""The actor of what the program does by itself."""
PAGE = 1000
"""Entries read at a time."""

Json = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Entry:
    """What is to be put on the trail.

    :param time_us: UTC microseconds.
    :param object: what it was done to, such as ``flag 3f0c...`` or ``unit R-210``.
    :param before: the values that changed, as they were; None for something new.
    :param after: the same values as they are now; None for something gone.
    """

    time_us: int
    actor: str
    action: str
    object: str
    before: Json | None = None
    after: Json | None = None
    reason: str = ""


@dataclass(frozen=True, slots=True)
class StoredEntry:
    """An entry as it stands on the trail; before and after as JSON texts."""

    sequence: int
    time_us: int
    actor: str
    action: str
    object: str
    before: str | None
    after: str | None
    reason: str
    previous_hash: str
    hash: str


@dataclass(frozen=True, slots=True)
class AuditReport:
    """What a walk along the trail found.

    :param first_broken: sequence of the first entry that is missing or not as it was written.
    :param head: the newest hash that the walk could prove.
    :param guarded: the triggers that refuse changes are in place.
    """

    whole: bool
    entries: int
    first_broken: int | None
    why: str
    head: str
    guarded: bool


def canonical(value: object) -> str:
    """The one JSON text of a value: sorted keys, no spaces, floats by repr.

    :raises RecordsError: nan, an infinity, a lone surrogate, or a type that JSON lacks.

    >>> canonical({"b": 0.1, "a": None})
    '{"a":null,"b":0.1}'
    """
    try:
        form = json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
        form.encode("utf-8")
    except (TypeError, ValueError) as error:
        raise RecordsError(f"this cannot be put on the audit trail: {error}") from None
    return form


def entry_hash(entry: StoredEntry) -> str:
    """The hash that the entry must have, from its fields and the hash before."""
    form = canonical(
        {
            "sequence": entry.sequence,
            "time_us": entry.time_us,
            "actor": entry.actor,
            "action": entry.action,
            "object": entry.object,
            "before": entry.before,
            "after": entry.after,
            "reason": entry.reason,
        }
    )
    return hashlib.sha256(bytes.fromhex(entry.previous_hash) + form.encode("utf-8")).hexdigest()


def append(connection: Connection, entry: Entry) -> int:
    """Put an entry on the trail, in the transaction of the change that it records; returns its sequence.

    The transaction must be one of ``Database.write``, which is alone: so no two entries can follow the same
    one.

    :raises AuditTrailBroken: the count of entries is missing.
    """
    head = connection.execute(select(schema_info.c.audit_entries, schema_info.c.audit_head)).one_or_none()
    if head is None:
        raise AuditTrailBroken("the count of audit entries is missing; run: softsensor audit verify")
    unhashed = StoredEntry(
        sequence=head.audit_entries + 1,
        time_us=entry.time_us,
        actor=entry.actor,
        action=entry.action,
        object=entry.object,
        before=None if entry.before is None else canonical(entry.before),
        after=None if entry.after is None else canonical(entry.after),
        reason=entry.reason,
        previous_hash=head.audit_head,
        hash="",
    )
    row = {name: getattr(unhashed, name) for name in StoredEntry.__slots__} | {"hash": entry_hash(unhashed)}
    connection.execute(insert(audit_trail).values(row))
    connection.execute(update(schema_info).values(audit_entries=unhashed.sequence, audit_head=row["hash"]))
    return unhashed.sequence


def _stored(connection: Connection) -> Iterator[StoredEntry]:
    query = select(audit_trail).order_by(audit_trail.c.sequence).limit(PAGE)
    rows = connection.execute(query).all()
    while rows:
        for row in rows:
            yield StoredEntry(**row._mapping)
        rows = connection.execute(query.where(audit_trail.c.sequence > rows[-1].sequence)).all()


def _guarded(connection: Connection) -> bool:
    """Whether the triggers that refuse changes are there and on."""
    if connection.dialect.name == "sqlite":
        query = "SELECT count(*) FROM sqlite_master WHERE type = 'trigger' AND tbl_name = 'audit_trail'"
        return bool(connection.execute(text(query)).scalar_one() == 3)
    query = (
        "SELECT count(*) FROM pg_trigger WHERE tgrelid = 'audit_trail'::regclass "
        "AND NOT tgisinternal AND tgenabled IN ('O', 'A')"
    )
    return bool(connection.execute(text(query)).scalar_one() == 3)


def _fault_of(entry: StoredEntry, expected: int, head: str) -> tuple[int, str] | None:
    """The first thing wrong with an entry that should be number ``expected`` and follow ``head``."""
    if entry.sequence != expected:
        return expected, f"entry {expected} is missing; the next one there is {entry.sequence}"
    if entry.previous_hash != head:
        return expected, f"entry {expected} does not follow the entry before it"
    try:
        sound = entry_hash(entry) == entry.hash
    except (RecordsError, ValueError):
        sound = False
    return None if sound else (expected, f"entry {expected} is not as it was written")


def verify(database: Database, expected_head: str | None = None) -> AuditReport:
    """Walk the trail from its first entry: every hash, every link, no gap, and as many as were written.

    :param expected_head: a head that was kept elsewhere; the trail must still contain it.
    """
    entries, head, fault = 0, NO_HASH, None
    met = expected_head in (None, NO_HASH)
    with database.read() as connection:
        guarded = _guarded(connection)
        info = connection.execute(select(schema_info)).one_or_none()
        for entry in _stored(connection):
            fault = _fault_of(entry, entries + 1, head)
            if fault:
                break
            entries, head = entry.sequence, entry.hash
            met = met or head == expected_head
    if fault is None and info is None:
        fault = entries + 1, "the count of audit entries is missing"
    if fault is None and info is not None and (entries, head) != (info.audit_entries, info.audit_head):
        fault = entries + 1, f"{info.audit_entries} entries were written, {entries} are there"
    if fault is None and not met:
        fault = entries + 1, "the expected head is not on this trail: it was cut off or rewritten"
    if fault is not None:
        return AuditReport(False, entries, fault[0], fault[1], head, guarded)
    return AuditReport(True, entries, None, "", head, guarded)
