"""The writer: order, batches, failures that reach the caller, back-pressure, and a database that goes and comes back."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Connection, event, insert, text

from softsensor.errors import RecordsError
from softsensor.records import engine as engine_module
from softsensor.records import happenings, reader, series, storing
from softsensor.records import writer as writer_module
from softsensor.records.audit import Entry, append, verify
from softsensor.records.engine import Database, open_database
from softsensor.records.errors import DatabaseAwayError
from softsensor.records.happenings import Event
from softsensor.records.tables import units
from softsensor.records.upgrade import upgrade_database
from softsensor.records.writer import RecordsWriter, WriterState

NOW = 1_796_083_200_000_000
LONG = 60.0
"""Seconds that no test comes near; a wait that does not end is a failure, not a hang."""


def note(connection: Connection, number: int) -> int:
    """A work that leaves an event and an audit entry, and gives its number back."""
    happenings.record_event(connection, Event(None, NOW + number, "note", str(number), key=str(number)))
    return number


def noted(database: Database) -> list[int]:
    """The numbers of the notes in the order in which they were written."""
    return [int(item.event.text) for item in reader.events_since(database, limit=100_000)]


def impossible(connection: Connection) -> None:
    """A work that the database refuses however often it is tried."""
    connection.execute(text("INSERT INTO checkpoints (unit_id, cycle, format_version) VALUES (1, 1, 1)"))


@contextmanager
def held(writer: RecordsWriter) -> Iterator[None]:
    """Keep the writer's thread busy inside a transaction, so that works gather behind it."""
    inside, release = threading.Event(), threading.Event()

    def hold(_connection: Connection) -> None:
        inside.set()
        assert release.wait(LONG)

    writer.submit(hold)
    assert inside.wait(LONG)
    try:
        yield
    finally:
        release.set()


def test_works_are_written_in_order_in_few_transactions(database: Database) -> None:
    with RecordsWriter(database, batch=100) as writer:
        with held(writer):
            futures = [writer.submit(note, number) for number in range(250)]
            assert writer.report().queued == 251
        assert [future.result(LONG) for future in futures] == list(range(250))
        assert writer.flush(LONG)
        report = writer.report()
    assert noted(database) == list(range(250))
    assert (report.state, report.queued, report.written) == (WriterState.WRITING, 0, 251)
    assert report.attempts == 1 + 3
    assert writer.state is WriterState.CLOSED


def test_cycles_go_through_the_writer(database: Database, plant: Any) -> None:
    with RecordsWriter(database) as writer:
        for cycle in range(30):
            writer.submit(storing.store_readings, plant.unit, plant.readings(cycle, 1)).result(LONG)
            writer.submit(storing.store_results, plant.unit, plant.results(cycle, 1))
    (block,) = series.published(database, plant.unit, 0, 99)
    assert block.results.digests == plant.results(0, 30).digests


def test_a_failed_work_reaches_its_caller_and_all_after_it_are_refused(database: Database) -> None:
    writer = RecordsWriter(database)
    with held(writer):
        before = [writer.submit(note, number) for number in range(3)]
        failed = writer.submit(impossible)
        after = writer.submit(note, 3)
    assert [future.result(LONG) for future in before] == [0, 1, 2]
    with pytest.raises(RecordsError, match="refused the work"):
        failed.result(LONG)
    with pytest.raises(RecordsError, match="since a write failed"):
        after.result(LONG)
    with pytest.raises(RecordsError, match=r"since a write failed: the database .* refused the work"):
        writer.submit(note, 4)
    with pytest.raises(RecordsError, match="since a write failed"):
        writer.flush(LONG)
    with pytest.raises(RecordsError, match="since a write failed"):
        writer.close()
    assert writer.state is WriterState.FAILED
    assert noted(database) == [0, 1, 2]


def test_a_work_that_raises_its_own_error_fails_with_it(database: Database) -> None:
    def wrong(_connection: Connection) -> None:
        raise ZeroDivisionError("its own")

    writer = RecordsWriter(database)
    future = writer.submit(wrong)
    with pytest.raises(ZeroDivisionError, match="its own"):
        future.result(LONG)
    with pytest.raises(RecordsError, match="its own"):
        writer.close()


def test_without_room_a_submit_waits_or_is_refused(database: Database) -> None:
    with RecordsWriter(database, capacity=3, patience=0.0) as writer, held(writer):
        writer.submit(note, 0)
        writer.submit(note, 1)
        with pytest.raises(RecordsError, match="3 records wait"):
            writer.submit(note, 2)
    waiting: list[int] = []
    begun = threading.Event()
    with RecordsWriter(database, capacity=2) as writer:

        def feed() -> None:
            for number in range(2, 40):
                writer.submit(note, number)
                waiting.append(writer.report().queued)
                begun.set()

        feeder = threading.Thread(target=feed)
        with held(writer):
            feeder.start()
            assert begun.wait(LONG)
        feeder.join(LONG)
    assert max(waiting) == 2
    assert noted(database) == list(range(40))


def test_after_closing_a_submit_is_refused(database: Database) -> None:
    writer = RecordsWriter(database)
    writer.submit(note, 0)
    writer.close()
    writer.close()
    assert noted(database) == [0]
    with pytest.raises(RecordsError, match="the records are closed"):
        writer.submit(note, 1)


@pytest.fixture
def sqlite_database(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Database]:
    """A new SQLite database that does not wait for another's lock."""
    monkeypatch.setattr(engine_module, "BUSY_SECONDS", 0)
    url = f"sqlite:///{(tmp_path / 'records.db').as_posix()}"
    upgrade_database(url)
    with open_database(url) as opened:
        yield opened


@contextmanager
def no_room(database: Database) -> Iterator[Callable[[], None]]:
    """Let the SQLite file grow no further, which gives SQLITE_FULL, until the function given is called."""
    pages = [1]

    def limit(connection: Any, _record: object, _proxy: object) -> None:
        connection.execute(f"PRAGMA max_page_count={pages[0]}")

    def make_room() -> None:
        pages[0] = 1_000_000

    event.listen(database.engine, "checkout", limit)
    yield make_room
    event.remove(database.engine, "checkout", limit)


def big(connection: Connection, number: int) -> int:
    """A note with a text that needs new pages."""
    connection.execute(insert(units).values(name=f"unit {number}", title="x" * 20_000, created_us=NOW))
    return note(connection, number)


def test_a_full_disk_is_told_in_words(sqlite_database: Database) -> None:
    with no_room(sqlite_database):
        with (
            pytest.raises(DatabaseAwayError, match="is full: the disk"),
            sqlite_database.write() as connection,
        ):
            big(connection, 1)
        assert noted(sqlite_database) == []


def test_works_wait_out_a_full_disk_in_order(sqlite_database: Database) -> None:
    with RecordsWriter(sqlite_database, batch=3) as writer, no_room(sqlite_database) as make_room:
        futures = [writer.submit(big, number) for number in range(10)]
        assert writer.wait_for(WriterState.WAITING, LONG)
        assert "is full" in writer.report().why
        make_room()
        assert [future.result(LONG) for future in futures] == list(range(10))
        assert writer.flush(LONG)
        assert writer.state is WriterState.WRITING
    assert noted(sqlite_database) == list(range(10))


def test_works_wait_for_another_programs_lock(sqlite_database: Database) -> None:
    with RecordsWriter(sqlite_database) as writer:
        with open_database(str(sqlite_database.url)) as other, other.write():
            future = writer.submit(note, 0)
            assert writer.wait_for(WriterState.WAITING, LONG)
            assert "is locked by another program" in writer.report().why
        assert future.result(LONG) == 0
    assert noted(sqlite_database) == [0]


def test_closing_while_the_database_is_away_says_what_was_lost(sqlite_database: Database) -> None:
    writer = RecordsWriter(sqlite_database)
    with no_room(sqlite_database):
        futures = [writer.submit(big, number) for number in range(4)]
        assert writer.wait_for(WriterState.WAITING, LONG)
        with pytest.raises(RecordsError, match=r"4 records could not be written .* is full"):
            writer.close(timeout=0.0)
        for future in futures:
            with pytest.raises(RecordsError, match="given up"):
                future.result(0.0)


def audited(connection: Connection, number: int) -> int:
    """A note that is on the audit trail as well, once."""
    if number not in (int(row) for row in connection.execute(text("SELECT text FROM events")).scalars()):
        append(connection, Entry(NOW, "softsensor", "noted", str(number)))
    return note(connection, number)


def test_a_killed_postgresql_server_comes_back_and_nothing_is_lost(
    postgres_server: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(writer_module, "LONGEST_PAUSE", 0.2)
    url = postgres_server.url.render_as_string(hide_password=False)
    upgrade_database(url)
    inside, release = threading.Event(), threading.Event()

    def cut_off(connection: Connection, number: int) -> int:
        audited(connection, number)
        inside.set()
        assert release.wait(LONG)
        return audited(connection, number)

    with open_database(url) as database, RecordsWriter(database, batch=7) as writer:
        futures = [writer.submit(audited, number) for number in range(5)]
        assert writer.flush(LONG)
        futures.append(writer.submit(cut_off, 5))
        futures += [writer.submit(audited, number) for number in range(6, 30)]
        assert inside.wait(LONG)
        postgres_server.kill()
        release.set()
        assert writer.wait_for(WriterState.WAITING, LONG)
        assert "cannot be reached" in writer.report().why
        with pytest.raises(DatabaseAwayError, match="cannot be reached"):
            reader.all_units(database)
        futures += [writer.submit(audited, number) for number in range(30, 40)]
        postgres_server.start()
        assert [future.result(LONG) for future in futures] == list(range(40))
        assert noted(database) == list(range(40))
        report = verify(database)
        assert (report.whole, report.entries) == (True, 40)
