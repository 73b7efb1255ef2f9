"""``softsensor check``: is the model sound, what can it know, which sensor faults can it find."""

from __future__ import annotations

import json as json_text
import math
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from plant_models.durations import parse_duration
from plant_models.errors import UnitError

if TYPE_CHECKING:
    from rich.console import Console

    from softsensor.service.model_report import ModelReport
    from softsensor.service.report_tables import ReportTable


def check(
    model: Annotated[Path, typer.Argument(help="The model file (TOML).")],
    json: Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")] = False,
    lab_interval: Annotated[
        str, typer.Option(help="Time between two laboratory results, for what would change each estimate.")
    ] = "24 h",
) -> None:
    """Is the model sound, what can it know, which sensor faults can it find? Exit status 1: not a soft
    sensor.
    """
    from softsensor.service.model_report import model_report
    from softsensor.unit_design import load_model

    report = model_report(load_model(model), _seconds(lab_interval))
    if json:
        typer.echo(json_text.dumps(as_document(report), ensure_ascii=False, allow_nan=False))
    else:
        _tell(report)
    if not report.sound:
        raise typer.Exit(1)


def _seconds(lab_interval: str) -> float:
    try:
        seconds = parse_duration(lab_interval)
    except UnitError as error:
        raise UnitError(f"--lab-interval: {error}") from error
    if seconds <= 0.0:
        raise UnitError(f"--lab-interval: expected a time above zero; got {lab_interval}")
    return seconds


def as_document(report: ModelReport) -> dict[str, Any]:
    """The report as JSON takes it: an infinite number (without limit) becomes null; every duration is in seconds, every sd
    in the unit beside it, as a difference; sizes on the sheet in the sensor's unit, a drift's per day, null where none is
    found. The handbook's chapter 9 lists the keys.
    """
    from softsensor.detection.detectability import HORIZONS
    from softsensor.service.model_report import CAUTION

    document: dict[str, Any] = _finite(asdict(report))
    for item, estimate in zip(document["estimates"], report.estimates, strict=True):
        item["sensors_help"] = estimate.sensors_help
        item["sd_total"] = None if estimate.own_offset else _finite(estimate.sd_with_sensors)
        item["sd_without"] = {tag: _finite(sd) for tag, sd in estimate.sd_without}
        item["sd_from"] = {name: _finite(sd) for name, sd in estimate.sd_from}
    for item, disturbance in zip(document["disturbances"], report.disturbances, strict=True):
        item["observable"] = disturbance.observable
    lines = [*document["sensors"], *(mend["then"] for mend in document["mends"] if mend["then"])]
    for line in lines:
        line["delay"] = None if line["absorbed"] else line["delay"]
        line["shift"]["absorbed"] = line["absorbed"]
    for line in [*lines, *document["inputs"]]:
        for fault in line["told"]:
            fault["alike"] = dict(fault["alike"])
    document["horizons"] = list(HORIZONS)
    document["sound"] = report.sound
    document["caution"] = CAUTION
    return document


def _finite(value: Any) -> Any:
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    return value


def _tell(report: ModelReport) -> None:
    from rich.console import Console

    from softsensor.service.model_report import CAUTION
    from softsensor.service.report_tables import knowledge_tables, paths_table
    from softsensor.service.sheet_tables import sheet_tables

    console = Console(highlight=False)
    if not console.is_terminal:
        console = Console(highlight=False, width=120)
    console.print(f"{report.unit}: {report.title}", markup=False)
    for table in (paths_table(report), *knowledge_tables(report), *sheet_tables(report)):
        console.print()
        print_table(console, table)
    console.print()
    _tell_rest(console, report)
    console.print(CAUTION, markup=False)


def print_table(console: Console, table: ReportTable) -> None:
    """A table with its notes, in the width of the console."""
    from rich import box
    from rich.table import Table
    from rich.text import Text

    shown = Table(title=table.title, title_justify="left", box=box.SIMPLE)
    for place, column in enumerate(table.columns):
        shown.add_column(column, justify="left" if place == 0 else "right", overflow="fold")
    for row in table.rows:
        shown.add_row(*(Text(cell) for cell in row))
    console.print(shown)
    for note in table.notes:
        console.print(note, markup=False)


def _tell_rest(console: Console, report: ModelReport) -> None:
    from softsensor.service.model_report import duration_text

    sampling, solution = report.sampling, report.solution
    console.print(f"Sample time {duration_text(sampling.sample_time)}: {sampling.advice}.", markup=False)
    console.print(
        f"Settled filter: {solution.states} states, spectral radius "
        f"{solution.spectral_radius:.6f}, Riccati residual "
        f"{solution.residual:.1e}, {'stabilising' if solution.stabilising else 'NOT stabilising'}"
        + (f"; {_directions(solution.unbounded)} without a steady variance" if solution.unbounded else ""),
        markup=False,
    )
    for warning in report.warnings:
        console.print(f"Warning: {warning}.", markup=False)
    verdict = "the sensors add to every estimate" if report.sound else "NOT a soft sensor for every estimate"
    console.print(f"Verdict: {verdict}.", markup=False)


def _directions(count: int) -> str:
    return f"{count} direction{'' if count == 1 else 's'}"
