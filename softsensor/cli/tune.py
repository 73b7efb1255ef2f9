"""``softsensor tune``: the noise of a model from a recorded history, and intervals that keep their promise."""

from __future__ import annotations

import json as json_text
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from plant_models.errors import Problem
from softsensor.cli.replay import only_with_a_database
from softsensor.errors import ReplayError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from connectors.history import History
    from plant_models.plant_model import PlantModel
    from softsensor.estimation.lab_results import LabArrival
    from softsensor.readings_of_cycle import CycleReadings
    from softsensor.service.tuning_report import FittedNumber, IntervalProposal, TuningReport, Whiteness

    Taken = tuple[History | CycleReadings, Sequence[LabArrival], tuple[str, ...]]
    """What is tuned on: readings, laboratory results within them, notes on what was left out."""


def tune(
    model: Annotated[Path, typer.Argument(help="The model file (TOML).")],
    history: Annotated[
        str,
        typer.Argument(
            help="Routine operation: CSV or Parquet with a time column; or the address of the records' database."
        ),
    ],
    out: Annotated[Path, typer.Option("--out", help="The tuned model file; never the one that is read.")],
    lab: Annotated[
        Path | None, typer.Option("--lab", help="Laboratory results (CSV or Parquet), for interval_scale.")
    ] = None,
    keep: Annotated[
        list[str] | None,
        typer.Option(
            "--keep", help="A number that stays as it is, such as TI2101A.noise_sd; may be given again."
        ),
    ] = None,
    interval_only: Annotated[
        bool,
        typer.Option(
            "--interval-only",
            help="Leave the noise as it is; only propose interval_scale, from laboratory results.",
        ),
    ] = False,
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
    page: Annotated[
        Path | None, typer.Option("--report", help="An HTML page with pictures; written when refused, too.")
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")] = False,
) -> None:
    """Fit noise_sd, disturbances and walks on the first part of a history, judge them on the rest, and write a model file
    in which only these numbers are changed. Exit status 1: refused, with the reason; nothing is written.
    """
    from softsensor.unit_design import load_model

    if out.exists() and model.exists() and out.samefile(model):
        raise Problem(f"--out: {out} is the model file that is read; expected another name")
    _check_page(page, (model, out))
    in_database = "://" in history
    if interval_only and (keep or not (in_database or lab)):
        raise Problem("--interval-only: expected --lab with it, and no --keep")
    plant_model = load_model(model)
    if in_database:
        if lab is not None:
            raise ReplayError(
                "--lab: the records hold the laboratory results already; expected none with a database"
            )
        taken = _from_database(plant_model, history, unit, start, end)
    else:
        only_with_a_database({"--unit": unit, "--from": start, "--to": end}, "tuned on")
        taken = _from_files(plant_model, Path(history), lab, timezone)
    report = _tuned(plant_model, taken, keep, interval_only)
    if report.accepted:
        _write(model, out, report)
    document = as_document(report, taken[2], out) | {
        "model": str(model),
        "model_digest": plant_model.digest,
        "history": f"records of {unit or plant_model.spec.name}" if in_database else history,
    }
    if page is not None:
        _write_page(page, plant_model, report, document)
    if json:
        typer.echo(json_text.dumps(document, ensure_ascii=False, allow_nan=False))
    else:
        _tell(report, taken[2], out)
        if page is not None:
            typer.echo(f"report: {page}")
    if not report.accepted:
        raise typer.Exit(1)


def _tuned(model: PlantModel, taken: Taken, keep: list[str] | None, interval_only: bool) -> TuningReport:
    from softsensor.service.tuning import tune as tune_model
    from softsensor.service.tuning import tune_intervals

    recorded, arrivals, _ = taken
    if interval_only:
        return tune_intervals(model, recorded, arrivals)
    return tune_model(model, recorded, arrivals, keep or ())


def _from_files(model: PlantModel, history: Path, lab: Path | None, timezone: str | None) -> Taken:
    from connectors.files import read_history, read_lab
    from connectors.lab_results import place_lab
    from softsensor.recorded_data import lab_arrivals, lab_tags
    from softsensor.service.assembly import rules_of

    recorded = read_history(history, rules_of(model.spec).tags, timezone)
    if lab is None:
        return recorded, (), ()
    results = read_lab(lab, lab_tags(model), timezone)
    usable, notes = place_lab(results, recorded.first_time, recorded.last_time)
    return recorded, lab_arrivals(model, usable), notes


def _from_database(
    model: PlantModel, url: str, unit: str | None, start: str | None, end: str | None
) -> Taken:
    from softsensor.service.recorded_period import Period
    from softsensor.service.tuning_records import routine_operation

    routine = routine_operation(model, url, Period(unit or model.spec.name, start, end))
    return routine.readings, routine.labs, routine.notes


def _check_page(page: Path | None, others: tuple[Path, Path]) -> None:
    """Before the fit: a page must not take the place of a model file, and needs a folder."""
    if page is None:
        return
    if any(page.resolve() == other.resolve() for other in others):
        raise Problem(f"--report: {page} is a model file here; expected another name")
    if not page.parent.is_dir():
        raise Problem(f"--report: {page}: there is no such folder; expected a place to write to")


def _write_page(page: Path, model: PlantModel, report: TuningReport, document: dict[str, Any]) -> None:
    from softsensor.web.tuning_page import tuning_page

    _put(page, tuning_page(model.spec, report, document), "--report")


def _write(model: Path, out: Path, report: TuningReport) -> None:
    """The new file gets its name once it is whole."""
    from softsensor.service.tuned_file import changed_text

    text = changed_text(model.read_bytes().decode("utf-8"), str(model), report.changes)
    _put(out, text, "--out")


def _put(path: Path, text: str, option: str) -> None:
    partial = path.with_name(f"{path.name}.partial")
    try:
        partial.write_bytes(text.encode("utf-8"))
        partial.replace(path)
    except OSError as error:
        raise Problem(f"{option}: {path}: {error.strerror or error}; expected a place to write to") from None


def as_document(report: TuningReport, notes: tuple[str, ...], out: Path) -> dict[str, Any]:
    """The report as JSON takes it: what is unknown becomes null; times are UTC or seconds."""
    from connectors.time_column import time_text
    from softsensor.service.model_report import CAUTION

    return {
        "unit": report.unit,
        "accepted": report.accepted,
        "refusals": list(report.refusals),
        "written": str(out) if report.accepted else None,
        "from": time_text(report.first_time),
        "judged_from": time_text(report.split_time),
        "to": time_text(report.last_time),
        "cycles": {"fitted": report.fit_cycles, "judged": report.check_cycles},
        "readings": report.readings,
        "log_likelihood": [_known(value) for value in report.log_likelihood],
        "log_likelihood_judged": [_known(value) for value in report.check_log_likelihood],
        "numbers": [_number(item) for item in report.numbers],
        "sensors": [_fields(item) | {"bound": _known(item.bound)} for item in report.sensors],
        "intervals": [_fields(item) for item in report.intervals],
        "notes": list(notes),
        "caution": CAUTION,
    }


def _number(item: FittedNumber) -> dict[str, Any]:
    return {
        "name": item.parameter.name,
        "before": item.parameter.value,
        "fitted": item.fitted,
        "low": _known(item.low),
        "high": _known(item.high),
        "written": item.written,
    }


def _fields(item: Whiteness | IntervalProposal) -> dict[str, Any]:
    from dataclasses import asdict

    return {name: _known(value) for name, value in asdict(item).items()}


def _known(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _tell(report: TuningReport, notes: tuple[str, ...], out: Path) -> None:
    from connectors.time_column import time_text
    from softsensor.service.model_report import CAUTION

    typer.echo(
        f"{report.unit}: {report.fit_cycles} cycles from {time_text(report.first_time)} fitted, {report.check_cycles} "
        f"from {time_text(report.split_time)} to judge the fit by"
    )
    for item in report.numbers:
        typer.echo(f"{item.parameter.name}: {_number_text(item)}")
    for sensor in report.sensors:
        typer.echo(_sensor_text(sensor, bool(report.numbers)))
    for estimate in report.intervals:
        typer.echo(_interval_text(estimate))
    for note in notes:
        typer.echo(f"note: {note}")
    if report.accepted:
        typer.echo(f"written to {out}: only these numbers are changed")
    for refusal in report.refusals:
        typer.echo(f"REFUSED: {refusal}")
    if report.refusals:
        typer.echo(
            "nothing is written; --keep NAME leaves a number as it is and fits the others, --interval-only all of them"
        )
    typer.echo(CAUTION)


def _number_text(item: FittedNumber) -> str:
    from plant_models.durations import format_duration

    def text(value: float) -> str:
        if not math.isfinite(value):
            return "unknown"
        if item.parameter.key != "time_constant":
            return f"{value:.4g}"
        seconds = 60.0 if value >= 180.0 else 1.0
        return f"{value / seconds:.4g} {'min' if seconds > 1.0 else 's'}"

    before = item.parameter.value
    was = format_duration(before) if item.parameter.key == "time_constant" else f"{before:.4g}"
    return f"{text(item.fitted)} (95 % interval {text(item.low)} to {text(item.high)}; was {was})"


def _sensor_text(item: Whiteness, fitted: bool) -> str:
    def both(before: float, after: float, form: str = ".3f") -> str:
        return f"{before:{form}} -> {after:{form}}" if fitted else f"{before:{form}}"

    return (
        f"{item.tag}, not fitted: nis {both(item.nis_before, item.nis_after)} (1 is right), whiteness "
        f"{both(item.whiteness_before, item.whiteness_after, '+.3f')} (white within {item.bound:.3f}), cumulative "
        f"periodogram off by {both(item.periodogram_before, item.periodogram_after)} (white within "
        f"{item.periodogram_bound:.3f})"
    )


def _interval_text(item: IntervalProposal) -> str:
    if not item.results:
        return f"{item.tag}: interval_scale {item.scale:g} {item.reason}"
    return (
        f"{item.tag}: {item.coverage:.1%} of {item.results} laboratory results inside the 95 % interval "
        f"({item.coverage_low:.1%} to {item.coverage_high:.1%}); interval_scale {item.scale_before:g} -> "
        f"{item.scale:g}, then {item.coverage_scaled:.1%}; {item.reason}"
    )
