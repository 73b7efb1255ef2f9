"""What people do to the records, each with its entry on the audit trail in the same transaction.

The time of each act is the database's clock. An act that changes nothing is refused or passed by without an
entry, as said at each.
"""

from __future__ import annotations

import math
from typing import Any

from sqlalchemy import Connection, Row, insert, select, update

from softsensor.errors import RecordsError
from softsensor.records.audit import Entry, append
from softsensor.records.engine import Database
from softsensor.records.tables import FINDINGS, flag_comments, flags, lab_results

DECISIONS = {"use": "used", "leave out": "left out"}


def acknowledge_flag(database: Database, flag_id: str, actor: str, reason: str = "") -> None:
    """Put on record that someone has seen the flag. Once is enough: later ones change nothing.

    :raises RecordsError: no such flag, no actor.
    """
    _required(actor, "who acknowledges")
    with database.write() as connection:
        row = _flag(connection, flag_id)
        if row.acknowledged_us is not None:
            return
        now = database.clock()
        after = {"acknowledged_us": now, "acknowledged_by": actor}
        before = {"acknowledged_us": None, "acknowledged_by": None}
        connection.execute(update(flags).where(flags.c.id == flag_id).values(after))
        append(connection, Entry(now, actor, "flag acknowledged", f"flag {flag_id}", before, after, reason))


def comment_flag(database: Database, flag_id: str, actor: str, text: str) -> None:
    """Add a comment to the flag; comments are never changed.

    :raises RecordsError: no such flag, no actor, no text.
    """
    _required(actor, "who comments")
    _required(text, "a comment's text")
    with database.write() as connection:
        _flag(connection, flag_id)
        now = database.clock()
        row = {"flag_id": flag_id, "time_us": now, "actor": actor, "text": text}
        connection.execute(insert(flag_comments).values(row))
        append(connection, Entry(now, actor, "flag commented", f"flag {flag_id}", None, {"text": text}))


def set_finding(
    database: Database,
    flag_id: str,
    finding: str,
    actor: str,
    reason: str,
    *,
    as_found: float | None = None,
    as_left: float | None = None,
) -> None:
    """Put on record what a person concluded about the flag; a later finding takes its place.

    :param finding: confirmed, not confirmed, process change, or undecided.
    :param as_found: a calibration's result before adjustment, in the unit of the tag; None leaves it.
    :param as_left: the same after adjustment.
    :raises RecordsError: no such flag or finding, no actor or reason, a calibration value that is not finite.
    """
    if finding not in FINDINGS:
        raise RecordsError(f"a finding cannot be {finding!r}; expected one of: {', '.join(FINDINGS)}")
    _required(actor, "who found it")
    _required(reason, "a reason")
    for name, value in (("as found", as_found), ("as left", as_left)):
        if value is not None and not math.isfinite(value):
            raise RecordsError(f"{name} cannot be {value}; expected a number in the unit of the tag")
    with database.write() as connection:
        row = _flag(connection, flag_id)
        now = database.clock()
        after = {
            "finding": finding,
            "finding_us": now,
            "finding_by": actor,
            "as_found": as_found if as_found is not None else row.as_found,
            "as_left": as_left if as_left is not None else row.as_left,
        }
        before = {name: row._mapping[name] for name in after}
        connection.execute(update(flags).where(flags.c.id == flag_id).values(after))
        append(connection, Entry(now, actor, "finding", f"flag {flag_id}", before, after, reason))


def decide_lab(database: Database, lab_id: int, decision: str, actor: str, reason: str) -> None:
    """Put on record that a person wants a laboratory result used or left out.

    The service learns of it by following the audit trail.

    :param decision: use, or leave out.
    :raises RecordsError: no such result or decision, no actor or reason.
    """
    if decision not in DECISIONS:
        raise RecordsError(f"a decision cannot be {decision!r}; expected one of: {', '.join(DECISIONS)}")
    _required(actor, "who decides")
    _required(reason, "a reason")
    with database.write() as connection:
        query = select(lab_results).where(lab_results.c.id == lab_id)
        row = connection.execute(query).one_or_none()
        if row is None:
            raise RecordsError(f"there is no laboratory result {lab_id}")
        now = database.clock()
        after = {"status": DECISIONS[decision], "reason": reason, "decided_us": now, "decided_by": actor}
        before = {name: row._mapping[name] for name in after}
        connection.execute(update(lab_results).where(lab_results.c.id == lab_id).values(after))
        name = f"laboratory result {lab_id}"
        append(connection, Entry(now, actor, "laboratory result decided", name, before, after, reason))


def _flag(connection: Connection, flag_id: str) -> Row[Any]:
    row = connection.execute(select(flags).where(flags.c.id == flag_id)).one_or_none()
    if row is None:
        raise RecordsError(f"there is no flag {flag_id}")
    return row


def _required(text: str, what: str) -> None:
    if not text.strip():
        raise RecordsError(f"{what} is missing")
