"""A lock that a service holds for as long as it lives, and that the operating system gives back when it dies.

No clock and no heartbeat: a killed process's lock is free at once, a stopped or slow one's is not.

- SQLite: a small database file beside the records, locked with BEGIN EXCLUSIVE. SQLite's locks are the operating
  system's, on Windows as elsewhere, and end with the process.
- PostgreSQL: an advisory lock of a session of its own. It ends with the connection; :meth:`Presence.renew` takes it
  again after the server was away. The server looks after a silent peer, so that a machine without power is given up
  within half a minute.
"""

from __future__ import annotations

import sqlite3
from contextlib import ExitStack
from pathlib import Path
from typing import Protocol
from uuid import uuid4

from sqlalchemy import Connection, text
from sqlalchemy.exc import SQLAlchemyError

from softsensor.errors import RecordsError
from softsensor.records.engine import Database
from softsensor.records.errors import mapped

SERVER_LOOKS_AFTER_PEERS = (
    "SET tcp_keepalives_idle = 10",
    "SET tcp_keepalives_interval = 5",
    "SET tcp_keepalives_count = 3",
)


class Presence(Protocol):
    """A lock that is held; ``key`` names it."""

    key: str

    def renew(self) -> None:
        """Take the lock again where the database has lost it.

        :raises DatabaseAwayError: it cannot be asked.
        """
        ...

    def close(self) -> None:
        """Give the lock back."""
        ...


def hold_presence(database: Database) -> Presence:
    """Take a new lock of one's own.

    :raises RecordsError: the database cannot be reached, or the records' folder cannot be written.
    """
    key = uuid4().hex
    if database.engine.dialect.name == "sqlite":
        return _LockedFile(database, key)
    return _LockedSession(database, key)


def is_present(connection: Connection, database: Database, key: str) -> bool:
    """Does somebody, on whatever machine, hold this lock now? Asked within a transaction of the records."""
    if database.engine.dialect.name == "sqlite":
        return _is_locked(_file_of(database, key))
    asked = connection.execute(text("SELECT pg_try_advisory_xact_lock(:number)"), {"number": _number(key)})
    return not asked.scalar_one()


def forget_presence(database: Database, key: str) -> None:
    """Take away what a dead service's lock has left behind."""
    if database.engine.dialect.name == "sqlite":
        _file_of(database, key).unlink(missing_ok=True)


def _file_of(database: Database, key: str) -> Path:
    records = Path(str(database.url.database)).expanduser().absolute()
    return records.with_name(f"{records.name}-service-{key}")


def _number(key: str) -> int:
    """A positive 63-bit number: PostgreSQL's advisory locks are named by signed 64 bits."""
    return int(key, 16) >> 65


def _is_locked(path: Path) -> bool:
    if not path.is_file():
        return False
    probe = None
    try:
        probe = sqlite3.connect(f"{path.as_uri()}?mode=rw", uri=True, timeout=0.0, isolation_level=None)
        probe.execute("BEGIN EXCLUSIVE")
    except sqlite3.OperationalError as error:
        if error.sqlite_errorcode & 0xFF == sqlite3.SQLITE_BUSY:
            return True
        raise RecordsError(f"{path}: cannot tell whether its service is alive: {error}") from None
    finally:
        if probe is not None:
            probe.close()
    return False


class _LockedFile:
    def __init__(self, database: Database, key: str) -> None:
        self.key = key
        self._path = _file_of(database, key)
        try:
            self._connection = sqlite3.connect(
                self._path, timeout=0.0, isolation_level=None, check_same_thread=False
            )
            self._connection.execute("BEGIN EXCLUSIVE")
        except sqlite3.Error as error:
            raise RecordsError(f"{self._path}: cannot be made beside the records: {error}") from None

    def renew(self) -> None:
        """A file's lock is lost with the process only."""

    def close(self) -> None:
        self._connection.close()
        self._path.unlink(missing_ok=True)


class _LockedSession:
    def __init__(self, database: Database, key: str) -> None:
        self.key = key
        self._database = database
        self._session = self._locked_session()

    def _locked_session(self) -> Connection:
        """A connection outside the pool: given back to it, it would keep the lock."""
        with mapped(self._database.url), ExitStack() as undo:
            session = self._database.engine.connect().execution_options(isolation_level="AUTOCOMMIT")
            undo.callback(session.close)
            session.detach()
            for setting in SERVER_LOOKS_AFTER_PEERS:
                session.execute(text(setting))
            session.execute(text("SELECT pg_advisory_lock(:number)"), {"number": _number(self.key)})
            undo.pop_all()
            return session

    def renew(self) -> None:
        try:
            self._session.execute(text("SELECT 1"))
        except SQLAlchemyError:
            self._session.close()
            self._session = self._locked_session()

    def close(self) -> None:
        self._session.close()
