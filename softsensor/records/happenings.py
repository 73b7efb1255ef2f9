"""Flags, laboratory results and events, put on record by the program. Each runs in the caller's transaction.

Every function may be repeated with the same arguments and counts once: a batch is written again after an
interruption.
"""

from __future__ import annotations

import json
import math
from dataclasses import dataclass, field
from uuid import UUID, uuid4, uuid5

from sqlalchemy import Connection, insert, select, update

from softsensor.errors import RecordsError
from softsensor.records.audit import PROGRAM, Entry, append
from softsensor.records.inserting import insert_new
from softsensor.records.tables import LAB_STATES, events, flags, lab_results

FLAG_NAMES = UUID("6d0c6f3e-9a55-4c7e-8a0b-5f2f0b8f7c11")


@dataclass(frozen=True, slots=True)
class Flag:
    """A sensor believed faulty. Times are UTC microseconds; size and size_sd in the unit of the tag, or nan.

    :param group: all that the data cannot tell apart from the tag, itself included.
    :param onset_from_us: with ``onset_to_us`` the onset's 95 % interval; None where it has no beginning.
    :param onset_to_us: None where there is no interval.
    :param hypotheses: what was weighed, with probabilities, the most probable first.
    """

    id: str
    tag: str
    kind: str
    onset_us: int
    detected_us: int
    size: float
    size_sd: float
    probability: float
    group: tuple[str, ...]
    onset_from_us: int | None = None
    onset_to_us: int | None = None
    hypotheses: tuple[tuple[str, float], ...] = ()


@dataclass(frozen=True, slots=True)
class Event:
    """Something that happened and is not a flag: a connection lost, a test up because a disturbance moved.

    :param kind: such as ``connection``, ``disturbance``, ``rest`` (earlier releases: ``suppression``), ``lost
        readings``.
    :param key: what tells this event from every other; an event made from a cycle should name unit, cycle and
        kind.
    """

    unit_id: int | None
    time_us: int
    kind: str
    text: str
    tag: str | None = None
    key: str = field(default_factory=lambda: str(uuid4()))


@dataclass(frozen=True, slots=True)
class LabResult:
    """A laboratory result as it came in. Times are UTC microseconds, time_uncertainty seconds."""

    tag: str
    sampled_us: int
    reported_us: int
    value: float
    time_uncertainty: float = 0.0


@dataclass(frozen=True, slots=True)
class LabOutcome:
    """What became of a laboratory result; predicted, innovation and sd in the unit of its tag, or nan.

    :param status: used, left out, or waiting for a person.
    :param counted_cycle: the cycle in which it counts; None while it does not.
    """

    status: str
    reason: str
    arrived_cycle: int | None
    counted_cycle: int | None
    predicted: float
    innovation: float
    sd: float


def flag_identity(unit: str, tag: str, kind: str, detected_us: int) -> str:
    """The id of a flag: the same for the same flag, live or replayed, interrupted and resumed or not."""
    return str(uuid5(FLAG_NAMES, f"{unit}\n{tag}\n{kind}\n{detected_us}"))


def open_flag(connection: Connection, unit_id: int, flag: Flag) -> bool:
    """Put a new flag on record and on the audit trail; False where it is there already."""
    row = {
        "id": flag.id,
        "unit_id": unit_id,
        "detected_us": flag.detected_us,
        "state": "open",
        **_diagnosis(flag),
    }
    if insert_new(connection, flags, [row]) == 0:
        return False
    append(connection, Entry(flag.detected_us, PROGRAM, "flag opened", f"flag {flag.id}", None, row))
    return True


def update_flag(connection: Connection, flag: Flag, time_us: int) -> None:
    """Put on record what is now known of an open flag; another tag, kind or group is audited.

    :raises RecordsError: there is no such flag.
    """
    row = _flag_row(connection, flag.id)
    after = _diagnosis(flag)
    connection.execute(update(flags).where(flags.c.id == flag.id).values(after))
    if any(row[name] != after[name] for name in ("tag", "kind", "group")):
        before = {name: row[name] for name in after}
        append(connection, Entry(time_us, PROGRAM, "flag rediagnosed", f"flag {flag.id}", before, after))


def clear_flag(connection: Connection, flag_id: str, cleared_us: int, reason: str) -> bool:
    """Close a flag, on the audit trail too; False where it is closed already.

    :raises RecordsError: there is no such flag.
    """
    row = _flag_row(connection, flag_id)
    if row["state"] == "cleared":
        return False
    after = {"state": "cleared", "cleared_us": cleared_us}
    connection.execute(update(flags).where(flags.c.id == flag_id).values(after))
    before = {"state": row["state"], "cleared_us": None}
    append(connection, Entry(cleared_us, PROGRAM, "flag cleared", f"flag {flag_id}", before, after, reason))
    return True


def record_event(connection: Connection, event: Event) -> None:
    """Put an event on record; one whose key is there already stays as it is."""
    names = ("unit_id", "time_us", "kind", "tag", "text", "key")
    insert_new(connection, events, [{name: getattr(event, name) for name in names}])


def store_lab(connection: Connection, unit_id: int, result: LabResult) -> int:
    """Put a laboratory result on record, waiting for its cycle; returns its id.

    The same result once more gives the id of the first. Another value for the same tag and sampling time that was
    reported later is a revision of the one before it.

    :raises RecordsError: the value is not finite.
    """
    if not math.isfinite(result.value):
        raise RecordsError(f"a laboratory result of {result.value} for {result.tag} cannot be stored")
    same_sample = (
        select(lab_results.c.id, lab_results.c.reported_us, lab_results.c.value)
        .where(lab_results.c.unit_id == unit_id, lab_results.c.tag == result.tag)
        .where(lab_results.c.sampled_us == result.sampled_us)
        .order_by(lab_results.c.id)
    )
    earlier = connection.execute(same_sample).all()
    for row in earlier:
        if (row.reported_us, row.value) == (result.reported_us, result.value):
            return int(row.id)
    values = {
        "unit_id": unit_id,
        "tag": result.tag,
        "sampled_us": result.sampled_us,
        "reported_us": result.reported_us,
        "value": result.value,
        "time_uncertainty": result.time_uncertainty,
        "status": "waiting for a person",
        "reason": "not yet compared with the estimate",
        "revises": max((row.id for row in earlier if row.reported_us < result.reported_us), default=None),
    }
    made = connection.execute(insert(lab_results).values(values).returning(lab_results.c.id))
    return int(made.scalar_one())


def settle_lab(connection: Connection, lab_id: int, outcome: LabOutcome) -> None:
    """Put on record what became of a laboratory result; a person's decision about it stays.

    :raises RecordsError: no such result, no such status.
    """
    if outcome.status not in LAB_STATES:
        raise RecordsError(f"a result cannot be {outcome.status!r}; expected one of: {', '.join(LAB_STATES)}")
    row = connection.execute(select(lab_results.c.decided_by).where(lab_results.c.id == lab_id)).one_or_none()
    if row is None:
        raise RecordsError(f"there is no laboratory result {lab_id}")
    values: dict[str, object] = {
        "arrived_cycle": outcome.arrived_cycle,
        "counted_cycle": outcome.counted_cycle,
        "predicted": number(outcome.predicted),
        "innovation": number(outcome.innovation),
        "sd": number(outcome.sd),
    }
    if row.decided_by is None and not replaced_lab(connection, lab_id):
        values |= {"status": outcome.status, "reason": outcome.reason}
    connection.execute(update(lab_results).where(lab_results.c.id == lab_id).values(values))


def replaced_lab(connection: Connection, lab_id: int) -> bool:
    """Is a value in use that was reported later for the same sample?"""
    old, new = lab_results.alias("old"), lab_results.alias("new")
    same = (
        (new.c.unit_id == old.c.unit_id) & (new.c.tag == old.c.tag) & (new.c.sampled_us == old.c.sampled_us)
    )
    query = select(new.c.id).join_from(old, new, same).where(old.c.id == lab_id, new.c.status == "used")
    return connection.execute(query.where(new.c.reported_us > old.c.reported_us)).first() is not None


def replace_labs(connection: Connection, lab_id: int, reason: str, time_us: int) -> None:
    """Earlier reports of a sample no longer count now that this one is used: audited, and told as an event."""
    new = connection.execute(select(lab_results).where(lab_results.c.id == lab_id)).one()
    query = (
        select(lab_results)
        .where(lab_results.c.unit_id == new.unit_id, lab_results.c.tag == new.tag)
        .where(lab_results.c.sampled_us == new.sampled_us, lab_results.c.reported_us < new.reported_us)
        .where((lab_results.c.status != "left out") | (lab_results.c.counted_cycle.is_not(None)))
        .order_by(lab_results.c.id)
    )
    after = {"status": "left out", "reason": reason, "counted_cycle": None}
    for old in connection.execute(query).all():
        before = {name: old._mapping[name] for name in after}
        connection.execute(update(lab_results).where(lab_results.c.id == old.id).values(after))
        name = f"laboratory result {old.id}"
        append(connection, Entry(time_us, PROGRAM, "laboratory result replaced", name, before, after, reason))
        text = f"{old.tag}: {old.value:.6g} was {reason}"
        key = f"laboratory result {old.id} replaced by {lab_id}"
        record_event(connection, Event(new.unit_id, time_us, "laboratory", text, old.tag, key))


def number(value: float) -> float | None:
    """The value for a column that is empty where nothing is known: None for nan and infinities."""
    return float(value) if math.isfinite(value) else None


def _diagnosis(flag: Flag) -> dict[str, object]:
    return {
        "tag": flag.tag,
        "kind": flag.kind,
        "onset_us": flag.onset_us,
        "size": number(flag.size),
        "size_sd": number(flag.size_sd),
        "probability": number(flag.probability),
        "group": "; ".join(flag.group),
        "onset_from_us": flag.onset_from_us,
        "onset_to_us": flag.onset_to_us,
        "hypotheses": json.dumps(flag.hypotheses, ensure_ascii=False) if flag.hypotheses else None,
    }


def _flag_row(connection: Connection, flag_id: str) -> dict[str, object]:
    row = connection.execute(select(flags).where(flags.c.id == flag_id)).one_or_none()
    if row is None:
        raise RecordsError(f"there is no flag {flag_id}")
    return dict(row._mapping)
