"""Errors of the database drivers, mapped to ours at this border. The tree is in plant_models.errors.

::

    RecordsError
    +-- DatabaseAwayError       cannot be reached, is full or is locked: the same work may succeed later
    +-- AuditTrailBroken
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager

import psycopg
from sqlalchemy.engine import URL
from sqlalchemy.exc import DBAPIError, SQLAlchemyError

from softsensor.errors import RecordsError

HIDDEN_QUERY_KEYS = ("password", "sslpassword", "passfile")


class DatabaseAwayError(RecordsError):
    """The database cannot be reached, is full, or is locked by another; the same work may succeed later."""


def shown(url: URL) -> str:
    """The address as it may be printed: without any password."""
    return url.difference_update_query(HIDDEN_QUERY_KEYS).render_as_string(hide_password=True)


def without_secrets(text: str, url: URL) -> str:
    """A driver's message on one line, with the passwords of the address taken out."""
    secrets = [url.password, *(url.query.get(key) for key in HIDDEN_QUERY_KEYS)]
    for secret in secrets:
        if isinstance(secret, str) and secret:
            text = text.replace(secret, "***")
    return " ".join(text.split())


def _sqlite_fault(error: sqlite3.Error) -> tuple[str, bool]:
    """What an SQLite error means in words, and whether the same work may succeed later."""
    code = (getattr(error, "sqlite_errorcode", None) or 0) & 0xFF
    meanings = {
        sqlite3.SQLITE_BUSY: ("is locked by another program", True),
        sqlite3.SQLITE_LOCKED: ("is locked by another program", True),
        sqlite3.SQLITE_FULL: ("is full: the disk, or the size allowed for the file, has no room left", True),
        sqlite3.SQLITE_IOERR: ("cannot be read or written: the disk gave an error", True),
        sqlite3.SQLITE_CANTOPEN: ("cannot be opened: check that the folder exists and may be written", True),
        sqlite3.SQLITE_READONLY: ("may not be written: check the file's and folder's permissions", False),
        sqlite3.SQLITE_NOTADB: ("is not an SQLite database", False),
        sqlite3.SQLITE_CORRUPT: ("is damaged: restore it from a backup", False),
    }
    return meanings.get(code, ("refused the work", False))


def _postgresql_fault(error: psycopg.Error) -> tuple[str, bool]:
    """What a PostgreSQL error means in words, and whether the same work may succeed later."""
    state = error.sqlstate or ""
    if state == "53100":
        return "is full: its disk has no room left", True
    if state in ("55P03", "40001", "40P01"):
        return "is locked by another program", True
    if state[:2] in ("08", "53", "57", "58") or (not state and isinstance(error, psycopg.OperationalError)):
        return "cannot be reached", True
    return "refused the work", False


def fault_of(error: SQLAlchemyError, url: URL) -> RecordsError:
    """The error of ours that a driver's error stands for; its one line names the database and what to do."""
    origin = error.orig if isinstance(error, DBAPIError) else None
    if isinstance(origin, sqlite3.Error):
        meaning, later = _sqlite_fault(origin)
    elif isinstance(origin, psycopg.Error):
        meaning, later = _postgresql_fault(origin)
        later = later or (isinstance(error, DBAPIError) and error.connection_invalidated)
    else:
        meaning, later = "refused the work", False
    detail = without_secrets(str(origin if origin is not None else error), url)
    line = f"the database {shown(url)} {meaning} ({detail})"
    return DatabaseAwayError(line) if later else RecordsError(line)


@contextmanager
def mapped(url: URL) -> Iterator[None]:
    """Turn every error of SQLAlchemy and its drivers that arises inside into one of ours."""
    try:
        yield
    except SQLAlchemyError as error:
        raise fault_of(error, url) from error
