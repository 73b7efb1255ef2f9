"""The command line: one file per command, one place that prints what went wrong."""

from __future__ import annotations

import os
import sys
from importlib.metadata import version
from typing import Annotated

import typer

from plant_models.errors import Problem
from softsensor.cli import audit, check, commission, db, demo, replay, run, tune

CAUTION = (
    "Advisory only: estimates and flags are no safety function, no part of one and no basis for defeating one. "
    "The program never writes to the control system. Thresholds, responses and return to service follow the site's "
    "procedures, management of change, local codes and a licensed or otherwise authorised engineer."
)

app = typer.Typer(
    name="softsensor",
    epilog=CAUTION,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    add_completion=False,
    rich_markup_mode=None,
)


def _tell_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"softsensor {version('softsensor')}")
        raise typer.Exit


@app.callback()
def options(
    version: Annotated[
        bool,
        typer.Option("--version", is_eager=True, callback=_tell_version, help="Say which release this is."),
    ] = False,
) -> None:
    """Transfer functions and plant readings in; estimates with honest intervals and instrument fault flags out."""


for command in (demo.demo, check.check, replay.replay, run.run, tune.tune, commission.commission):
    app.command(epilog=CAUTION)(command)
app.add_typer(db.app, name="db")
app.add_typer(audit.app, name="audit")


ONE_THREAD = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
"""The program's matrices are small: threads of the linear algebra wait for each other, and on a busy machine take three
times the processor's time. Read when numpy is first imported, which is after this module."""


def main() -> None:
    """Run a command; exit status 0 done, 1 the answer is no, 2 bad input."""
    for name in ONE_THREAD:
        os.environ.setdefault(name, "1")
    try:
        app()
    except Problem as problem:
        for line in problem.lines:
            typer.echo(line, err=True)
        sys.exit(2)


if __name__ == "__main__":
    main()
