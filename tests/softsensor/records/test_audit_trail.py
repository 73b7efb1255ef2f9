"""The audit trail: its hashes by a second computation, tampering found where it was done, no fork."""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
from dataclasses import replace

import pytest
from sqlalchemy import Connection, insert, text

from softsensor.errors import RecordsError
from softsensor.records.audit import Entry, append, canonical, verify
from softsensor.records.engine import Database, open_database
from softsensor.records.reader import audit_entries, latest_audit_entries
from softsensor.records.tables import audit_trail

NOW = 1_796_083_200_000_000


def fill(database: Database, count: int) -> None:
    with database.write() as connection:
        for number in range(count):
            after = {"text": f"größer {number}", "b": None, "a": [0.1, -0.0, 1e300]}
            append(connection, Entry(NOW + number, "A. Müller", "changed", f"thing {number}", None, after))


def unguard(connection: Connection) -> None:
    """Take the triggers off, as someone who owns the database can."""
    if connection.dialect.name == "postgresql":
        connection.execute(text("ALTER TABLE audit_trail DISABLE TRIGGER USER"))
        return
    for name in ("update", "delete", "replace"):
        connection.execute(text(f"DROP TRIGGER audit_trail_no_{name}"))


def test_hashes_agree_with_a_second_computation(database: Database) -> None:
    """The chain written out again from the description alone (softsensor.records.audit's docstring)."""
    fill(database, 3)
    head = bytes(32)
    for entry in audit_entries(database):
        names = ("sequence", "time_us", "actor", "action", "object", "before", "after", "reason")
        pairs = sorted((name, getattr(entry, name)) for name in names)
        inner = ",".join(f"{json.dumps(k)}:{json.dumps(v, ensure_ascii=False)}" for k, v in pairs)
        assert entry.previous_hash == head.hex()
        head = hashlib.sha256(head + ("{" + inner + "}").encode()).digest()
        assert entry.hash == head.hex()
    report = verify(database)
    assert (report.whole, report.entries, report.head, report.guarded) == (True, 3, head.hex(), True)


def test_the_canonical_form() -> None:
    assert canonical({"b": 0.1, "a": {"é": -0.0, "d": None}}) == '{"a":{"d":null,"é":-0.0},"b":0.1}'
    for bad in (float("nan"), float("inf"), {"x": object()}, "\ud800"):
        with pytest.raises(RecordsError, match="audit trail"):
            canonical(bad)


def test_an_empty_trail_is_whole(database: Database) -> None:
    report = verify(database)
    assert (report.whole, report.entries, report.head) == (True, 0, "0" * 64)


TAMPERING = {
    "a word changed": (
        "UPDATE audit_trail SET reason = 'other' WHERE sequence = 4",
        4,
        "not as it was written",
    ),
    "a time changed": ("UPDATE audit_trail SET time_us = time_us + 1 WHERE sequence = 1", 1, "not as it was"),
    "null for empty": ("UPDATE audit_trail SET before = '' WHERE sequence = 5", 5, "not as it was written"),
    "a hash changed": (
        "UPDATE audit_trail SET hash = replace(hash, 'a', 'b') WHERE sequence = 3",
        3,
        "written",
    ),
    "no hash at all": ("UPDATE audit_trail SET hash = 'zz' WHERE sequence = 6", 6, "not as it was written"),
    "one taken out": ("DELETE FROM audit_trail WHERE sequence = 3", 3, "entry 3 is missing"),
    "first taken out": ("DELETE FROM audit_trail WHERE sequence = 1", 1, "entry 1 is missing"),
    "newest cut off": (
        "DELETE FROM audit_trail WHERE sequence > 4",
        5,
        "6 entries were written, 4 are there",
    ),
    "all taken out": ("DELETE FROM audit_trail", 1, "6 entries were written, 0 are there"),
    "count lowered": ("UPDATE schema_info SET audit_entries = 5", 7, "5 entries were written, 6 are there"),
    "count gone": ("DELETE FROM schema_info", 7, "the count of audit entries is missing"),
}


@pytest.mark.parametrize("kind", TAMPERING)
def test_tampering_is_found_where_it_was_done(database: Database, kind: str) -> None:
    fill(database, 6)
    statement, broken, why = TAMPERING[kind]
    with database.write() as connection:
        unguard(connection)
        connection.execute(text(statement))
    report = verify(database)
    assert not report.whole
    assert report.first_broken == broken
    assert why in report.why
    assert not report.guarded


def test_an_entry_moved_to_another_place_is_found(database: Database) -> None:
    fill(database, 4)
    with database.write() as connection:
        unguard(connection)
        for old, new in ((2, 99), (3, 2), (99, 3)):
            connection.execute(text(f"UPDATE audit_trail SET sequence = {new} WHERE sequence = {old}"))
    report = verify(database)
    assert (report.whole, report.first_broken) == (False, 2)
    assert "does not follow" in report.why


def test_entries_added_after_a_cut_do_not_heal_it(database: Database) -> None:
    fill(database, 5)
    with database.write() as connection:
        unguard(connection)
        connection.execute(text("DELETE FROM audit_trail WHERE sequence = 5"))
    fill(database, 2)
    assert verify(database).first_broken == 5


def test_a_rewritten_trail_is_found_with_a_head_kept_elsewhere(database: Database) -> None:
    fill(database, 5)
    kept = verify(database).head
    fill(database, 1)
    assert verify(database, kept).whole
    entries = audit_entries(database)
    with database.write() as connection:
        unguard(connection)
        connection.execute(text("DELETE FROM audit_trail"))
        connection.execute(text(f"UPDATE schema_info SET audit_entries = 0, audit_head = '{'0' * 64}'"))
        for old in entries:
            append(connection, Entry(old.time_us, "B. Fälscher", old.action, old.object))
    assert verify(database).whole
    report = verify(database, kept)
    assert not report.whole
    assert "cut off or rewritten" in report.why


def test_a_second_entry_after_the_same_one_is_refused_by_the_database(database: Database) -> None:
    fill(database, 2)
    last = latest_audit_entries(database, limit=1)[0]
    fork = {name: getattr(replace(last, sequence=3, hash="f" * 64), name) for name in last.__slots__}
    with pytest.raises(RecordsError), database.write() as connection:
        connection.execute(insert(audit_trail).values(fork))


APPENDER = """
import sys
from softsensor.records.audit import Entry, append
from softsensor.records.engine import open_database
with open_database(sys.argv[1]) as database:
    for number in range(20):
        with database.write() as connection:
            append(connection, Entry(number, sys.argv[2], "act", str(number)))
"""


def test_two_processes_do_not_fork_the_chain(database_url: str) -> None:
    started = [
        subprocess.Popen([sys.executable, "-c", APPENDER, database_url, name], stderr=subprocess.PIPE)
        for name in ("one", "two")
    ]
    for process in started:
        assert process.communicate(timeout=120)[1] == b""
        assert process.returncode == 0
    with open_database(database_url) as database:
        report = verify(database)
        entries = audit_entries(database)
    assert (report.whole, report.entries) == (True, 40)
    for name in ("one", "two"):
        assert [entry.object for entry in entries if entry.actor == name] == [str(n) for n in range(20)]


def test_pages_of_the_trail(database: Database) -> None:
    fill(database, 7)
    assert [entry.sequence for entry in audit_entries(database, after=2, limit=3)] == [3, 4, 5]
    assert [entry.sequence for entry in latest_audit_entries(database, limit=2)] == [7, 6]
    assert [entry.sequence for entry in latest_audit_entries(database, before=6, limit=2)] == [5, 4]
