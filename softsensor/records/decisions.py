"""What people decided about sensors and tests and what became of it; which sensors are left out since when."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

from sqlalchemy import Connection, Select, or_, select, update

from softsensor.errors import RecordsError
from softsensor.records.engine import Database
from softsensor.records.happenings import Event, record_event
from softsensor.records.inserting import insert_or_replace
from softsensor.records.rests import end_rests
from softsensor.records.tables import decisions, left_out


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of a decision. Times are UTC microseconds.

    :param until_us: until when it holds; None without a limit.
    :param refusal: why it had no effect; empty where it had.
    """

    taken_cycle: int
    taken_us: int
    until_us: int | None
    refusal: str


@dataclass(frozen=True, slots=True)
class LeftOut:
    """A sensor kept from the estimate: by a person, or by the program after a flag. None: no end is known yet."""

    tag: str
    since_us: int
    until_us: int | None
    by_person: bool

    def covers(self, time_us: int) -> bool:
        """Is it left out at this time?"""
        return self.since_us <= time_us and (self.until_us is None or time_us < self.until_us)


@dataclass(frozen=True, slots=True)
class StoredDecision:
    """A decision on record; the last four are None until a cycle has taken it."""

    id: int
    unit_id: int
    act: str
    tag: str | None
    flag_id: str | None
    occasion: str | None
    seconds: float | None
    actor: str
    reason: str
    decided_us: int
    taken_cycle: int | None
    taken_us: int | None
    until_us: int | None
    refusal: str | None


def settle_decision(connection: Connection, decision_id: int, outcome: Outcome) -> None:
    """Put on record what became of a decision; may be repeated.

    :raises RecordsError: there is no such decision.
    """
    values = asdict(outcome)
    done = connection.execute(update(decisions).where(decisions.c.id == decision_id).values(values))
    if done.rowcount != 1:
        raise RecordsError(f"there is no decision {decision_id}")


def store_left_out(connection: Connection, unit_id: int, rows: Sequence[LeftOut]) -> None:
    """Put on record which sensors are left out since when; what is there already gets its new end."""
    insert_or_replace(connection, left_out, [{"unit_id": unit_id, **asdict(row)} for row in rows])


def begin_anew(connection: Connection, unit_id: int, time_us: int) -> None:
    """A run that remembers nothing of the one before uses every sensor and tests again: on record, with an event."""
    out = update(left_out).where(left_out.c.unit_id == unit_id, left_out.c.since_us < time_us)
    out = out.where(or_(left_out.c.until_us.is_(None), left_out.c.until_us > time_us))
    rest = update(decisions).where(decisions.c.unit_id == unit_id, decisions.c.until_us > time_us)
    changed = connection.execute(out.values(until_us=time_us)).rowcount
    changed += connection.execute(rest.values(until_us=time_us)).rowcount
    changed += end_rests(connection, unit_id, time_us)
    if changed:
        text = "the run begins anew: what was left out before counts again, and tests that rested run"
        record_event(connection, Event(unit_id, time_us, "put back", text, key=f"{unit_id} {time_us} anew"))


def waiting_decisions(database: Database, unit_id: int) -> list[StoredDecision]:
    """Decisions about a unit that no cycle has taken yet, oldest first."""
    query = select(decisions).where(decisions.c.unit_id == unit_id, decisions.c.taken_us.is_(None))
    return _decisions(database, query.order_by(decisions.c.id))


def decisions_about_flag(database: Database, flag_id: str) -> list[StoredDecision]:
    """Decisions that answer a flag, oldest first."""
    return _decisions(
        database, select(decisions).where(decisions.c.flag_id == flag_id).order_by(decisions.c.id)
    )


def rest_at(database: Database, unit_id: int, time_us: int) -> StoredDecision | None:
    """The decision by which the unit's tests rest at a time, if they do."""
    about_tests = select(decisions).where(
        decisions.c.unit_id == unit_id, decisions.c.act.in_(("rest", "go on"))
    )
    taken = about_tests.where(decisions.c.taken_us.is_not(None), decisions.c.refusal == "")
    newest = _decisions(database, taken.order_by(decisions.c.taken_us.desc(), decisions.c.id.desc()).limit(1))
    if not newest or newest[0].act != "rest":
        return None
    until = newest[0].until_us
    return newest[0] if until is not None and time_us < until else None


def left_out_of(database: Database, unit_id: int, tag: str | None = None) -> list[LeftOut]:
    """When sensors of a unit were left out, the latest first."""
    query = select(left_out).where(left_out.c.unit_id == unit_id)
    if tag is not None:
        query = query.where(left_out.c.tag == tag)
    with database.read() as connection:
        rows = connection.execute(query.order_by(left_out.c.since_us.desc(), left_out.c.tag)).all()
    return [LeftOut(row.tag, row.since_us, row.until_us, bool(row.by_person)) for row in rows]


def _decisions(database: Database, query: Select[Any]) -> list[StoredDecision]:
    with database.read() as connection:
        return [StoredDecision(**row._mapping) for row in connection.execute(query).all()]
