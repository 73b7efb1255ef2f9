"""``softsensor audit``: proving the audit trail whole."""

from __future__ import annotations

import json as json_text
import re
from dataclasses import asdict
from typing import Annotated

import typer

from softsensor.cli.db import DatabaseOption, JsonOption
from softsensor.errors import RecordsError
from softsensor.records import audit
from softsensor.records.engine import open_database

app = typer.Typer(help="The audit trail.", no_args_is_help=True, pretty_exceptions_enable=False)


@app.callback()
def group() -> None:
    """The audit trail: who did what, when and why."""


@app.command()
def verify(
    database: DatabaseOption,
    json: JsonOption = False,
    expect_head: Annotated[
        str | None,
        typer.Option(
            metavar="HASH", help="A head printed earlier and kept elsewhere: it must still be there."
        ),
    ] = None,
) -> None:
    """Prove the audit trail whole, or say where it is broken (exit status 1).

    Every entry's hash is computed again. Someone who owns the database can still rewrite the whole trail, or
    cut its newest entries off, and adapt the count: keep the head somewhere else and hand it back with
    --expect-head.
    """
    head = _checked(expect_head)
    with open_database(database) as opened:
        report = audit.verify(opened, head)
    typer.echo(json_text.dumps(asdict(report)) if json else _in_words(report))
    raise typer.Exit(0 if report.whole else 1)


def _checked(head: str | None) -> str | None:
    if head is not None and re.fullmatch(r"[0-9a-f]{64}", head.strip().lower()) is None:
        raise RecordsError("--expect-head: expected the 64 hexadecimal digits of a head")
    return None if head is None else head.strip().lower()


def _in_words(report: audit.AuditReport) -> str:
    if report.whole:
        text = f"the audit trail is whole: {report.entries} entries, head {report.head}"
    else:
        text = f"the audit trail is broken at entry {report.first_broken}: {report.why}"
    if not report.guarded:
        text += "\nthe triggers that refuse changes are not all in place"
    return text
