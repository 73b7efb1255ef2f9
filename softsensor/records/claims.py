"""Which service serves a unit: one at a time.

A service claims its units when it starts. The row names the claim's holder; a lock that ends with the holder's process
(``records.presence``) tells whether it is alive. A live holder's unit is refused to a newcomer, a dead one's is taken
over at once. Every write of readings looks whether the unit is still its writer's own, so that two services can never
mix, not even where the lock was lost with the database's server.
"""

from __future__ import annotations

import os
import socket
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from datetime import UTC, datetime

from sqlalchemy import Connection, Row, delete, select

from softsensor.errors import RecordsError
from softsensor.records.engine import Database, system_clock
from softsensor.records.errors import DatabaseAwayError
from softsensor.records.inserting import insert_or_replace
from softsensor.records.presence import Presence, forget_presence, hold_presence, is_present
from softsensor.records.tables import claims, units


@contextmanager
def claimed(database: Database, unit_ids: Sequence[int]) -> Iterator[Presence]:
    """These units are ours until the block ends; all of them, or none.

    :raises RecordsError: a live service holds one of them; says which service, and since when.
    """
    presence = hold_presence(database)
    try:
        with database.write() as connection:
            left_behind = _take(connection, database, unit_ids, presence.key)
        for key in left_behind:
            forget_presence(database, key)
        try:
            yield presence
        finally:
            # a claim that cannot be given up because the database is away is taken over as a dead one's
            with suppress(DatabaseAwayError), database.write() as connection:
                connection.execute(delete(claims).where(claims.c.holder == presence.key))
    finally:
        presence.close()


def _take(connection: Connection, database: Database, unit_ids: Sequence[int], key: str) -> set[str]:
    """Claim the units; returns the locks of dead holders that hold nothing any more."""
    query = select(claims, units.c.name).join(units, units.c.id == claims.c.unit_id)
    holders = connection.execute(query.where(claims.c.unit_id.in_(unit_ids)).order_by(units.c.name)).all()
    alive = {item.holder for item in holders if is_present(connection, database, item.holder)}
    lines = [_refusal(database, item) for item in holders if item.holder in alive]
    if lines:
        raise RecordsError(*lines)
    row = {"holder": key, "host": socket.gethostname(), "process": os.getpid(), "since_us": system_clock()}
    insert_or_replace(connection, claims, [{"unit_id": number} | row for number in unit_ids])
    dead = {item.holder for item in holders}
    kept = connection.execute(select(claims.c.holder).where(claims.c.holder.in_(dead))).scalars()
    return dead - set(kept)


def _refusal(database: Database, holder: Row[tuple[object, ...]]) -> str:
    return (
        f"{database.name}: unit {holder.name} is served already, {_who(holder)}; "
        "end that service first, or give this one a database of its own"
    )


def _who(holder: Row[tuple[object, ...]]) -> str:
    since = datetime.fromtimestamp(holder.since_us // 1_000_000, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    return f"by process {holder.process} on {holder.host} since {since}"


def require_claim(connection: Connection, unit_id: int, holder: str) -> None:
    """Refuse a write of a service whose unit another one has taken over.

    :raises RecordsError: says who has it now, and since when.
    """
    row = connection.execute(select(claims).where(claims.c.unit_id == unit_id)).one_or_none()
    if row is not None and row.holder == holder:
        return
    name = connection.execute(select(units.c.name).where(units.c.id == unit_id)).scalar_one()
    now = "nobody" if row is None else _who(row).removeprefix("by ")
    raise RecordsError(
        f"unit {name} is no longer this service's: its lock was lost for a while, and the unit is now held by {now}; "
        "nothing is written to it from here"
    )
