"""``softsensor replay``: the live cycle over recorded data."""

from __future__ import annotations

import json as json_text
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

from plant_models.number_text import plain
from softsensor.errors import ReplayError

if TYPE_CHECKING:
    from plant_models.plant_model import PlantModel
    from softsensor.detection.flags import Note
    from softsensor.service.replay import Replay, Stretch
    from softsensor.service.smoothed_run import SmoothedRun


def replay(
    model: Annotated[Path, typer.Argument(help="The model file (TOML).")],
    history: Annotated[
        str,
        typer.Argument(help="CSV or Parquet with a time column; or the address of the records' database."),
    ],
    out: Annotated[
        Path, typer.Option("--out", help="Folder for the result files; made where it is missing.")
    ],
    lab: Annotated[
        Path | None, typer.Option("--lab", help="Late laboratory results (CSV or Parquet).")
    ] = None,
    late: Annotated[
        Path | None, typer.Option("--late", help="Readings that came after their cycles (CSV or Parquet).")
    ] = None,
    format: Annotated[
        Literal["csv", "parquet"], typer.Option("--format", help="Of the result files.")
    ] = "csv",
    states: Annotated[
        Path | None,
        typer.Option(
            "--states", help="States of the plant (TOML, [[state]] tables) in which the tests rest."
        ),
    ] = None,
    timezone: Annotated[
        str | None, typer.Option("--timezone", help="Zone of times that name none, such as Europe/Berlin.")
    ] = None,
    unit: Annotated[
        str | None, typer.Option("--unit", help="With a database: the unit; by default the model's.")
    ] = None,
    start: Annotated[
        str | None, typer.Option("--from", help="With a database: first time, ISO 8601; by default all.")
    ] = None,
    end: Annotated[str | None, typer.Option("--to", help="With a database: time after the last.")] = None,
    smooth: Annotated[
        bool,
        typer.Option("--smooth", help="For review: each estimate also given all readings of the period."),
    ] = False,
    json: Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")] = False,
) -> None:
    """Run a model over recorded data and write estimates, innovations, flags and a summary."""
    from softsensor.service.result_files import ResultFiles
    from softsensor.service.smoothed_run import SmoothedRun
    from softsensor.unit_design import load_model

    plant_model = load_model(model)
    if "://" in history:
        running, notes, cycles = _from_database(plant_model, history, unit, start, end)
        if lab is not None:
            raise ReplayError(
                "--lab: the records hold the laboratory results already; expected none with a database"
            )
        if late is not None:
            raise ReplayError(
                "--late: the records hold what came late already; expected none with a database"
            )
        if states is not None:
            raise ReplayError(
                "--states: the records hold the plant's states already; expected none with a database"
            )
    else:
        only_with_a_database({"--unit": unit, "--from": start, "--to": end}, "replayed")
        running, notes, cycles = _from_files(plant_model, Path(history), (lab, states, late), timezone)
    running.totals.notes += notes
    with ResultFiles(out, format, running.design) as files, SmoothedRun(running.design, out) as smoothing:
        for stretch in _with_progress(running, cycles, json, smoothing if smooth else None):
            files.add(stretch)
        for part in smoothing.cycles(running) if smooth else ():
            files.add_smoothed(part)
        summary = files.finish(running)
    if json:
        typer.echo(json_text.dumps(summary, ensure_ascii=False))
    else:
        _tell(summary, out)


def only_with_a_database(options: dict[str, str | None], done: str) -> None:
    """Refuse options that say which of the recorded cycles are meant, where a file is given."""
    given = [name for name, value in options.items() if value is not None]
    if given:
        raise ReplayError(
            f"{', '.join(given)}: expected only with a database's address (such as sqlite:///records.db) in place of "
            f"the history file; of a file all rows are {done}"
        )


def _from_files(
    model: PlantModel,
    history: Path,
    beside: tuple[Path | None, Path | None, Path | None],
    timezone: str | None,
) -> tuple[Replay, list[Note], int]:
    from connectors.files import open_history, read_history, read_lab, read_late
    from softsensor.recorded_data import lab_tags, prepare, replay_tags
    from softsensor.service.state_tables import fitted_states, read_states_file

    lab, states, late = beside
    rules = () if states is None else read_states_file(states)
    opened = open_history if not rules and late is None else read_history
    recorded = opened(history, replay_tags(model, rules), timezone)
    fitted = fitted_states(rules, model.spec, recorded.tags, str(states))
    results = read_lab(lab, lab_tags(model), timezone) if lab is not None else None
    rows = read_late(late, recorded.tags, timezone) if late is not None else None
    running, notes = prepare(model, recorded, results, fitted, rows)
    span = (recorded.last_time - recorded.first_time) * 1e-6
    return running, notes, int(span / model.spec.sample_time) + 1


def _from_database(
    model: PlantModel, url: str, unit: str | None, start: str | None, end: str | None
) -> tuple[Replay, list[Note], int]:
    from softsensor.recorded_data import prepare_from_records

    return prepare_from_records(model, url, unit or model.spec.name, start, end)


def _with_progress(
    running: Replay, cycles: int, quiet: bool, smoothing: SmoothedRun | None
) -> Iterator[Stretch]:
    from rich.console import Console
    from rich.progress import Progress

    from softsensor.service.replay import gathered

    console = Console(stderr=True)
    with Progress(console=console, disable=quiet or not console.is_terminal, transient=True) as progress:
        task = progress.add_task("cycles", total=cycles)
        stretches = running.stretches() if smoothing is None else smoothing.keeping(running.stretches())
        for stretch in gathered(stretches):
            progress.advance(task, len(stretch.results))
            yield stretch


def _tell(summary: dict[str, object], out: Path) -> None:
    typer.echo(
        f"{summary['unit']}: {summary['cycles']} cycles, {summary['flags']} flags; digest {summary['digest']}"
    )
    estimates = summary["estimates"]
    assert isinstance(estimates, dict)
    for tag, item in estimates.items():
        if item["lab_count"]:
            typer.echo(
                f"{tag}: {item['lab_count']} laboratory results, rmsep {plain(item['rmsep'], 4)}, "
                f"bias {plain(item['bias'], 3)}, coverage {item['coverage']:.0%}"
            )
    notes = summary["notes"]
    assert isinstance(notes, list)
    for note in notes:
        typer.echo(f"note: {note}")
    typer.echo(f"written to {out}")
    typer.echo(str(summary["caution"]))
