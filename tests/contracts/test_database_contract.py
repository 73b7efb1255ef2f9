"""What both databases must do alike: migrations, transactions, the guard of the audit trail."""

from __future__ import annotations

import threading
from importlib import resources

import pytest
from alembic import command
from alembic.autogenerate import compare_metadata
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from sqlalchemy import inspect, text

from softsensor.errors import RecordsError
from softsensor.records import reader
from softsensor.records.audit import Entry, append, verify
from softsensor.records.engine import Database, connect_database, open_database
from softsensor.records.tables import metadata, units
from softsensor.records.upgrade import upgrade_database

NOW = 1_796_083_200_000_000


def entry(action: str, time_us: int = NOW) -> Entry:
    return Entry(time_us, "someone", action, "a thing", {"x": 0.1}, {"x": -0.0}, "because")


def test_migrations_make_the_tables_of_the_metadata(database: Database) -> None:
    with database.read() as connection:
        context = MigrationContext.configure(connection, opts={"compare_server_default": True})
        assert compare_metadata(context, metadata) == []
        names = set(inspect(connection).get_table_names())
    assert names == set(metadata.tables) | {"alembic_version"}


def test_an_upgrade_says_what_it_applied_and_can_be_repeated(empty_database_url: str) -> None:
    assert upgrade_database(empty_database_url) == ["0001", "0002", "0003", "0004", "0005"]
    assert upgrade_database(empty_database_url) == []


def test_two_upgrades_at_once_apply_the_revision_once(empty_database_url: str) -> None:
    applied: list[list[str]] = []
    threads = [
        threading.Thread(target=lambda: applied.append(upgrade_database(empty_database_url)))
        for _ in range(3)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(applied) == [[], [], ["0001", "0002", "0003", "0004", "0005"]]


def test_flags_from_before_the_onset_s_interval_stay_with_their_trail(empty_database_url: str) -> None:
    """A database as revision 0004 left it, with a flag and its entry; then the upgrade."""
    flag = {
        "id": "a flag", "unit_id": 1, "tag": "TI2101A", "kind": "drift", "onset_us": NOW, "detected_us": NOW + 1,
        "size": 1.5, "size_sd": 0.2, "probability": 0.97, "group": "TI2101A", "state": "open",
    }  # fmt: skip
    columns = ", ".join(f'"{name}"' for name in flag)
    values = ", ".join(f":{name}" for name in flag)
    with connect_database(empty_database_url) as database, database.write() as connection:
        config = Config()
        config.set_main_option("script_location", str(resources.files("migrations")))
        config.set_main_option("path_separator", "os")
        config.attributes["connection"] = connection
        command.upgrade(config, "0004")
        connection.execute(units.insert().values(id=1, name="R-210", title="", created_us=NOW))
        connection.execute(text(f"INSERT INTO flags ({columns}) VALUES ({values})"), flag)
        append(connection, Entry(NOW, "softsensor", "flag opened", "flag a flag", None, flag, ""))
        head = connection.execute(text("SELECT audit_head FROM schema_info")).scalar_one()
    assert upgrade_database(empty_database_url) == ["0005"]
    with open_database(empty_database_url) as database:
        (found,) = reader.flags_of(database)
        report = verify(database)
    assert (found.size, found.group, found.onset_from_us, found.onset_to_us) == (
        1.5,
        ("TI2101A",),
        None,
        None,
    )
    assert found.hypotheses == ()
    assert (report.whole, report.head) == (True, head)


def test_a_database_that_was_not_upgraded_names_the_command(empty_database_url: str) -> None:
    with pytest.raises(RecordsError, match="softsensor db upgrade --database"):
        open_database(empty_database_url)


def test_a_database_from_a_newer_release_is_refused_by_both_revisions(database_url: str) -> None:
    with open_database(database_url) as database, database.write() as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = '9999'"))
    for refuse in (open_database, upgrade_database):
        with pytest.raises(RecordsError, match=r"at revision 9999.* up to 0005.*install that release"):
            refuse(database_url)


def test_a_failed_transaction_leaves_nothing(database: Database) -> None:
    def make_and_fail() -> None:
        with database.write() as connection:
            connection.execute(units.insert().values(name="R-210", title="", created_us=NOW))
            append(connection, entry("made"))
            raise RuntimeError

    with pytest.raises(RuntimeError):
        make_and_fail()
    with database.read() as connection:
        assert connection.execute(units.select()).all() == []
    assert verify(database).entries == 0


def test_a_read_transaction_sees_one_state(database: Database) -> None:
    with database.read() as reading:
        before = reading.execute(units.select()).all()
        with database.write() as connection:
            connection.execute(units.insert().values(name="R-210", title="", created_us=NOW))
        assert reading.execute(units.select()).all() == before == []
    with database.read() as reading:
        assert len(reading.execute(units.select()).all()) == 1


def test_a_reference_to_nothing_is_refused(database: Database) -> None:
    statement = text("INSERT INTO checkpoints (unit_id, cycle, format_version, state) VALUES (7, 0, 1, '')")
    with pytest.raises(RecordsError, match="refused the work"), database.write() as connection:
        connection.execute(statement)


CHANGES = {
    "update": "UPDATE audit_trail SET reason = 'another' WHERE sequence = 2",
    "delete": "DELETE FROM audit_trail WHERE sequence = 2",
    "delete all": "DELETE FROM audit_trail",
    "replace": (
        "INSERT OR REPLACE INTO audit_trail SELECT sequence, time_us, 'another', action, object, before,"
        " after, reason, previous_hash, hash FROM audit_trail WHERE sequence = 2"
    ),
    "truncate": "TRUNCATE audit_trail",
    "upsert": (
        "INSERT INTO audit_trail SELECT * FROM audit_trail WHERE sequence = 2"
        " ON CONFLICT (sequence) DO UPDATE SET actor = 'another'"
    ),
}
FOREIGN = {"sqlite": ("truncate", "upsert"), "postgresql": ("replace",)}
"""Statements that the database does not know."""


@pytest.mark.parametrize("change", CHANGES)
def test_the_audit_trail_is_append_only(database: Database, change: str) -> None:
    with database.write() as connection:
        for number in range(3):
            append(connection, entry(f"act {number}"))
    known = change not in FOREIGN[database.engine.dialect.name]
    with (
        pytest.raises(RecordsError, match="append-only" if known else "refused the work"),
        database.write() as connection,
    ):
        connection.execute(text(CHANGES[change]))
    report = verify(database)
    assert report.whole
    assert report.entries == 3
    assert report.guarded
