"""Units and the revisions of their models, audited. Each function runs in the caller's transaction."""

from __future__ import annotations

from dataclasses import dataclass

from sqlalchemy import Connection, insert, select, update

from softsensor.errors import RecordsError
from softsensor.records.audit import Entry, append
from softsensor.records.inserting import insert_new
from softsensor.records.tables import REVISION_STATES, model_revisions, units


@dataclass(frozen=True, slots=True)
class Revision:
    """One version of a unit's model.

    :param digest: of the discretised model, hexadecimal.
    :param arrays: ``named_arrays.pack_arrays`` of the discretised model.
    """

    digest: str
    file_text: str
    arrays: bytes


@dataclass(frozen=True, slots=True)
class Deed:
    """Who does something, why, and when (UTC microseconds)."""

    actor: str
    reason: str
    time_us: int


def register_unit(connection: Connection, name: str, title: str, time_us: int) -> int:
    """The unit's id; a unit that is not on record yet is put there."""
    insert_new(connection, units, [{"name": name, "title": title, "created_us": time_us}])
    return int(connection.execute(select(units.c.id).where(units.c.name == name)).scalar_one())


def register_revision(connection: Connection, unit_id: int, revision: Revision, deed: Deed) -> int:
    """The id of this revision of the unit; one that is not on record yet is put there, as a draft."""
    known = connection.execute(
        select(model_revisions.c.id)
        .where(model_revisions.c.unit_id == unit_id, model_revisions.c.digest == revision.digest)
        .where(model_revisions.c.file_text == revision.file_text)
        .order_by(model_revisions.c.id.desc())
    ).first()
    if known is not None:
        return int(known.id)
    row = {
        "unit_id": unit_id,
        "digest": revision.digest,
        "file_text": revision.file_text,
        "arrays": revision.arrays,
        "created_us": deed.time_us,
        "state": "draft",
        "actor": deed.actor,
    }
    made = connection.execute(insert(model_revisions).values(row).returning(model_revisions.c.id))
    revision_id = int(made.scalar_one())
    after = {"unit_id": unit_id, "digest": revision.digest, "state": "draft"}
    append(connection, _entry(deed, "revision registered", revision_id, None, after))
    return revision_id


def set_revision_state(connection: Connection, revision_id: int, state: str, deed: Deed) -> None:
    """Move a revision to another state. The one in service before it is withdrawn when it comes into service.

    :raises RecordsError: no such revision, no such state.
    """
    if state not in REVISION_STATES:
        raise RecordsError(f"a revision cannot be {state!r}; expected one of: {', '.join(REVISION_STATES)}")
    row = connection.execute(
        select(model_revisions.c.unit_id, model_revisions.c.state).where(model_revisions.c.id == revision_id)
    ).one_or_none()
    if row is None:
        raise RecordsError(f"there is no revision {revision_id}")
    if row.state == state:
        return
    if state == "in service":
        others = connection.execute(
            select(model_revisions.c.id)
            .where(model_revisions.c.unit_id == row.unit_id, model_revisions.c.state == "in service")
            .order_by(model_revisions.c.id)
        )
        for other in others.scalars().all():
            set_revision_state(connection, other, "withdrawn", deed)
    connection.execute(update(model_revisions).where(model_revisions.c.id == revision_id).values(state=state))
    append(connection, _entry(deed, f"revision {state}", revision_id, {"state": row.state}, {"state": state}))


def _entry(
    deed: Deed, action: str, revision_id: int, before: dict[str, object] | None, after: dict[str, object]
) -> Entry:
    return Entry(deed.time_us, deed.actor, action, f"revision {revision_id}", before, after, deed.reason)
