"""The database: its address, its connections, and what a transaction is.

A write transaction is alone: SQLite by BEGIN IMMEDIATE, PostgreSQL by an advisory lock taken first. So two
processes cannot fork the audit trail, and no order of writes can deadlock. A read transaction sees one state
of the database.

SQLite runs in WAL mode, so that pages can be read while the service writes, with synchronous=FULL: in WAL
mode NORMAL may lose the last commits at a power failure, and a record that someone was told is kept must be
kept. Batches make the price, one flush per commit, small.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, create_engine, event, text
from sqlalchemy.engine import URL, make_url
from sqlalchemy.exc import ArgumentError, SQLAlchemyError

from softsensor.errors import RecordsError
from softsensor.records.errors import fault_of, mapped, shown

LOCK_KEY = 0x534F4654
"""The advisory lock that makes write transactions on PostgreSQL take turns."""
BUSY_SECONDS = 10
"""How long a transaction waits for another program's to end."""
CONNECT_ARGUMENTS = {
    "connect_timeout": 10,
    "keepalives_idle": 10,
    "keepalives_interval": 5,
    "keepalives_count": 3,
    "tcp_user_timeout": 15_000,
}


def system_clock() -> int:
    """UTC microseconds since 1970 by this machine's clock."""
    return time.time_ns() // 1000


@dataclass(frozen=True)
class Database:
    """An open database. Made by :func:`open_database`; closed with :meth:`close` or by leaving a ``with``."""

    url: URL
    engine: Engine
    clock: Callable[[], int] = system_clock
    """UTC microseconds; the service hands in its own."""

    @property
    def name(self) -> str:
        """The address without its password."""
        return shown(self.url)

    @contextmanager
    def write(self) -> Iterator[Connection]:
        """A transaction that is alone: committed when the block ends well, rolled back otherwise.

        :raises DatabaseAwayError: the same work may succeed later; RecordsError: it will not.
        """
        with mapped(self.url), self.engine.connect() as plain:
            connection = plain.execution_options(alone=True)
            with connection.begin():
                if self.engine.dialect.name == "postgresql":
                    connection.execute(text("SELECT pg_advisory_xact_lock(:key)"), {"key": LOCK_KEY})
                yield connection

    @contextmanager
    def read(self) -> Iterator[Connection]:
        """A transaction that sees one state of the database and changes nothing."""
        options: dict[str, Any] = {}
        if self.engine.dialect.name == "postgresql":
            options = {"isolation_level": "REPEATABLE READ", "postgresql_readonly": True}
        with mapped(self.url), self.engine.connect() as plain:
            connection = plain.execution_options(**options)
            with connection.begin():
                yield connection

    def close(self) -> None:
        """Close every connection."""
        self.engine.dispose()

    def __enter__(self) -> Database:
        return self

    def __exit__(self, *exception: object) -> None:
        self.close()


def parse_url(url: str) -> URL:
    """The address, checked.

    :raises RecordsError: not an address, or of a database that this program does not know.
    """
    try:
        parsed = make_url(url)
    except (ArgumentError, ValueError):
        raise RecordsError(
            "the database address does not parse; expected sqlite:///records.db or "
            "postgresql+psycopg://user@host/name"
        ) from None
    if parsed.drivername == "postgresql":
        parsed = parsed.set(drivername="postgresql+psycopg")
    if parsed.drivername in ("sqlite", "sqlite+pysqlite"):
        if parsed.database in (None, "", ":memory:") or str(parsed.database).startswith("file:"):
            raise RecordsError(
                f"{shown(parsed)}: a database in memory keeps no records; expected sqlite:///records.db"
            )
        return parsed
    if parsed.drivername == "postgresql+psycopg":
        return parsed
    raise RecordsError(
        f"{shown(parsed)}: {parsed.drivername} is not supported; expected sqlite:/// or postgresql+psycopg://"
    )


def _sqlite_engine(url: URL) -> Engine:
    engine = create_engine(url, hide_parameters=True, connect_args={"timeout": BUSY_SECONDS})

    @event.listens_for(engine, "connect")
    def prepare(connection: Any, _record: object) -> None:
        connection.isolation_level = None
        for pragma in ("journal_mode=WAL", "synchronous=FULL", "foreign_keys=ON"):
            connection.execute(f"PRAGMA {pragma}")

    @event.listens_for(engine, "begin")
    def begin(connection: Connection) -> None:
        alone = connection.get_execution_options().get("alone", False)
        connection.exec_driver_sql("BEGIN IMMEDIATE" if alone else "BEGIN")

    return engine


def _postgresql_engine(url: URL) -> Engine:
    arguments = {key: value for key, value in CONNECT_ARGUMENTS.items() if key not in url.query}
    engine = create_engine(url, hide_parameters=True, pool_pre_ping=True, connect_args=arguments)

    @event.listens_for(engine, "connect")
    def prepare(connection: Any, _record: object) -> None:
        with connection.cursor() as cursor:
            cursor.execute(f"SET lock_timeout = '{BUSY_SECONDS}s'")
            cursor.execute("SET timezone = 'UTC'")
        connection.commit()

    return engine


def connect_database(url: str, clock: Callable[[], int] = system_clock) -> Database:
    """Connect, whatever revision the database is at; makes the file of an SQLite database that is not there.

    :raises RecordsError: a bad address; a database that cannot be reached (the password is never printed).
    """
    parsed = parse_url(url)
    sqlite = parsed.get_backend_name() == "sqlite"
    if sqlite and not Path(str(parsed.database)).expanduser().parent.is_dir():
        raise RecordsError(f"the folder of the database {shown(parsed)} does not exist")
    engine = _sqlite_engine(parsed) if sqlite else _postgresql_engine(parsed)
    try:
        with engine.connect() as connection:
            connection.execute(text("SELECT 1"))
    except SQLAlchemyError as error:
        engine.dispose()
        raise fault_of(error, parsed) from error
    return Database(parsed, engine, clock)


def open_database(url: str, clock: Callable[[], int] = system_clock) -> Database:
    """Open a database that is at this release's revision.

    :param url: ``sqlite:///records.db`` or ``postgresql+psycopg://user@host/name``.
    :param clock: UTC microseconds, for the times of what people do.
    :raises RecordsError: a bad address; a database that cannot be reached, was not made or upgraded yet
        (names the command), or is from a newer release.
    """
    from softsensor.records.upgrade import require_current

    parsed = parse_url(url)
    if parsed.get_backend_name() == "sqlite" and not Path(str(parsed.database)).is_file():
        raise RecordsError(
            f"the database {shown(parsed)} does not exist; make it with: "
            f"softsensor db upgrade --database {shown(parsed)}"
        )
    database = connect_database(url, clock)
    try:
        require_current(database)
    except BaseException:
        database.close()
        raise
    return database
