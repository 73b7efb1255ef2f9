"""``softsensor db``: making and migrating the database."""

from __future__ import annotations

import json as json_text
from typing import Annotated

import typer

from softsensor.records.upgrade import upgrade_database

app = typer.Typer(
    help="The database of the records: SQLite or PostgreSQL.",
    no_args_is_help=True,
    pretty_exceptions_enable=False,
)

DatabaseOption = Annotated[
    str,
    typer.Option(
        "--database",
        metavar="URL",
        help="sqlite:///records.db or postgresql+psycopg://user@host/name",
        envvar="SOFTSENSOR_DATABASE",
    ),
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")]


@app.callback()
def group() -> None:
    """The database of the records: SQLite or PostgreSQL."""


@app.command()
def upgrade(database: DatabaseOption, json: JsonOption = False) -> None:
    """Make the database, or bring it to this release's revision; all of it or nothing."""
    applied = upgrade_database(database)
    if json:
        typer.echo(json_text.dumps({"applied": applied}))
    elif applied:
        typer.echo(f"applied: {', '.join(applied)}")
    else:
        typer.echo("the database is up to date")
