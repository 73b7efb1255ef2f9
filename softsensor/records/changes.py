"""What people do to the records, each with its entry on the audit trail in the same transaction.

The time of each act is the database's clock. An act that changes nothing is refused or passed by without an
entry, as said at each.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from sqlalchemy import Connection, Row, insert, select, update

from softsensor.errors import RecordsError
from softsensor.records.audit import Entry, append
from softsensor.records.engine import Database
from softsensor.records.tables import FINDINGS, decisions, flag_comments, flags, lab_results, left_out, units

OCCASIONS = ("start-up", "shutdown", "plant off", "grade change", "other")
ACTIONS = {
    "put back": "sensor put back",
    "leave out": "sensor left out",
    "rest": "tests put to rest",
    "go on": "tests go on",
}
LONGEST_S = 30 * 86400.0
"""Longest time for which tests rest or a person leaves a sensor out."""
ANSWERED = ("bias", "drift", "model")
"""Kinds of flag that a person's finding closes; the others show in the readings themselves, and clear with them."""
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
    with database.write() as connection:
        row = _flag(connection, flag_id)
        _find(connection, row, (finding, actor, reason), (as_found, as_left), database.clock())


def _find(
    connection: Connection,
    row: Row[Any],
    said: tuple[str, str, str],
    calibration: tuple[float | None, float | None],
    now: int,
) -> None:
    """:param said: finding, actor, reason."""
    finding, actor, reason = said
    as_found, as_left = calibration
    for name, value in (("as found", as_found), ("as left", as_left)):
        if value is not None and not math.isfinite(value):
            raise RecordsError(f"{name} cannot be {value}; expected a number in the unit of the tag")
    after = {
        "finding": finding,
        "finding_us": now,
        "finding_by": actor,
        "as_found": as_found if as_found is not None else row.as_found,
        "as_left": as_left if as_left is not None else row.as_left,
    }
    before = {name: row._mapping[name] for name in after}
    connection.execute(update(flags).where(flags.c.id == row.id).values(after))
    append(connection, Entry(now, actor, "finding", f"flag {row.id}", before, after, reason))


def put_back(
    database: Database,
    flag_id: str,
    actor: str,
    reason: str,
    as_found: float | None = None,
    as_left: float | None = None,
    finding: str = "confirmed",
) -> None:
    """Decide that a sensor which was left out after a flag counts again, or that a flag whose instrument was in use all
    the time is answered; what was found becomes the flag's finding.

    The service takes it at its next cycle. A confirmed finding needs both values of the calibration.

    :raises RecordsError: no such flag or finding, the sensor is not left out and the flag is not open, the decision is
        made already, no actor or reason, no calibration, or one that is not finite.
    """
    if finding not in FINDINGS:
        raise RecordsError(f"a finding cannot be {finding!r}; expected one of: {', '.join(FINDINGS)}")
    if finding == "confirmed" and (as_found is None or as_left is None):
        raise RecordsError("a confirmed finding needs the errors as found and as left")
    _required(actor, "who puts it back")
    _required(reason, "a reason")
    with database.write() as connection:
        row = _flag(connection, flag_id)
        out = select(left_out.c.tag).where(
            left_out.c.unit_id == row.unit_id, left_out.c.tag == row.tag, left_out.c.until_us.is_(None)
        )
        waits = row.cleared_us is None and row.kind in ANSWERED
        if not waits and connection.execute(out).first() is None:
            raise RecordsError(f"{row.tag} is not left out and its flag is not open")
        made = select(decisions.c.id).where(decisions.c.flag_id == flag_id, decisions.c.taken_us.is_(None))
        if connection.execute(made).first() is not None:
            raise RecordsError(f"{row.tag} is being put back already: the decision waits for the next cycle")
        now = database.clock()
        _find(connection, row, (finding, actor, reason), (as_found, as_left), now)
        _decide(
            connection, now, actor, reason, unit_id=row.unit_id, act="put back", tag=row.tag, flag_id=flag_id
        )


def leave_out(database: Database, unit_id: int, tag: str, seconds: float, actor: str, reason: str) -> None:
    """Decide that a sensor does not count for a time, because it is worked on; the time runs from the cycle that takes it.

    :raises RecordsError: no actor or reason, no sound time.
    """
    with _deciding(database, actor, reason, seconds) as (connection, now):
        values = {"unit_id": unit_id, "act": "leave out", "tag": tag, "seconds": seconds}
        _decide(connection, now, actor, reason, **values)


def end_leaving_out(database: Database, unit_id: int, tag: str, actor: str, reason: str) -> None:
    """Decide that a sensor which a person has left out counts again before its time is over.

    :raises RecordsError: no actor or reason.
    """
    with _deciding(database, actor, reason) as (connection, now):
        _decide(connection, now, actor, reason, unit_id=unit_id, act="put back", tag=tag)


def rest_tests(
    database: Database, unit_id: int, occasion: str, seconds: float, actor: str, reason: str
) -> None:
    """Decide that the tests of a unit rest for a time, because the plant is not as its model knows it.

    :param occasion: one of OCCASIONS.
    :raises RecordsError: no such occasion, no actor or reason, no sound time.
    """
    if occasion not in OCCASIONS:
        raise RecordsError(f"the occasion cannot be {occasion!r}; expected one of: {', '.join(OCCASIONS)}")
    with _deciding(database, actor, reason, seconds) as (connection, now):
        values = {"unit_id": unit_id, "act": "rest", "occasion": occasion, "seconds": seconds}
        _decide(connection, now, actor, reason, **values)


def end_rest(database: Database, unit_id: int, actor: str, reason: str) -> None:
    """Decide that the tests of a unit go on before their rest is over.

    :raises RecordsError: no actor or reason.
    """
    with _deciding(database, actor, reason) as (connection, now):
        _decide(connection, now, actor, reason, unit_id=unit_id, act="go on")


@contextmanager
def _deciding(
    database: Database, actor: str, reason: str, seconds: float = 1.0
) -> Iterator[tuple[Connection, int]]:
    _required(actor, "who decides")
    _required(reason, "a reason")
    if not 0.0 < seconds <= LONGEST_S:
        raise RecordsError(f"a time of {seconds} s is not possible; expected more than none, at most 30 days")
    with database.write() as connection:
        yield connection, database.clock()


def _decide(connection: Connection, now: int, actor: str, reason: str, **values: Any) -> None:
    """The decision for the service to take, and its entry on the audit trail."""
    unit = connection.execute(
        select(units.c.name).where(units.c.id == values["unit_id"])
    ).scalar_one_or_none()
    if unit is None:
        raise RecordsError(f"there is no unit {values['unit_id']}")
    about = f"sensor {values['tag']}" if values.get("tag") else "tests"
    row = {**values, "actor": actor, "reason": reason, "decided_us": now}
    connection.execute(insert(decisions).values(row))
    entry = Entry(now, actor, ACTIONS[values["act"]], f"{about} of unit {unit}", None, values, reason)
    append(connection, entry)


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
