"""Inserts that may be repeated: a batch is written again after an interruption, and must count once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from sqlalchemy import Connection, Table
from sqlalchemy.dialects import postgresql, sqlite

Row = Mapping[str, Any]


def _insert(connection: Connection, table: Table) -> sqlite.Insert | postgresql.Insert:
    return sqlite.insert(table) if connection.dialect.name == "sqlite" else postgresql.insert(table)


def insert_new(connection: Connection, table: Table, rows: Sequence[Row]) -> int:
    """Insert the rows that are not there yet, by any unique key; returns how many were new."""
    if not rows:
        return 0
    statement = _insert(connection, table).on_conflict_do_nothing()
    counted = statement.execution_options(preserve_rowcount=True)
    return connection.execute(counted, [dict(row) for row in rows]).rowcount


def insert_or_replace(connection: Connection, table: Table, rows: Sequence[Row]) -> None:
    """Insert the rows; where the primary key is there already, the new row takes its place."""
    if not rows:
        return
    keys = [column.name for column in table.primary_key]
    statement = _insert(connection, table)
    others = {name: statement.excluded[name] for name in table.columns.keys() if name not in keys}  # noqa: SIM118
    statement = statement.on_conflict_do_update(index_elements=keys, set_=others)
    connection.execute(statement, [dict(row) for row in rows])
