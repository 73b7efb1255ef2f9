"""``softsensor tune``: the noise of a model from a recorded history, and intervals that keep their promise."""

from __future__ import annotations

import json as json_text
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from plant_models.errors import Problem

if TYPE_CHECKING:
    from plant_models.plant_model import PlantModel
    from softsensor.service.tuning_report import FittedNumber, IntervalProposal, TuningReport, Whiteness


def tune(
    model: Annotated[Path, typer.Argument(help="The model file (TOML).")],
    history: Annotated[Path, typer.Argument(help="CSV or Parquet with a time column: routine operation.")],
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
            "--interval-only", help="Leave the noise as it is; only propose interval_scale, from --lab."
        ),
    ] = False,
    timezone: Annotated[
        str | None, typer.Option("--timezone", help="Zone of times that name none, such as Europe/Berlin.")
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")] = False,
) -> None:
    """Fit noise_sd, disturbances and walks on the first part of a history, judge them on the rest, and write a model file
    in which only these numbers are changed. Exit status 1: refused, with the reason; nothing is written.
    """
    from softsensor.unit_design import load_model

    if out.exists() and model.exists() and out.samefile(model):
        raise Problem(f"--out: {out} is the model file that is read; expected another name")
    if interval_only and (lab is None or keep):
        raise Problem("--interval-only: expected --lab with it, and no --keep")
    plant_model = load_model(model)
    report, notes = _tuned(plant_model, history, lab, None if interval_only else keep or [], timezone)
    if report.accepted:
        _write(model, out, report)
    if json:
        typer.echo(json_text.dumps(as_document(report, notes, out), ensure_ascii=False, allow_nan=False))
    else:
        _tell(report, notes, out)
    if not report.accepted:
        raise typer.Exit(1)


def _tuned(
    model: PlantModel, history: Path, lab: Path | None, keep: list[str] | None, timezone: str | None
) -> tuple[TuningReport, tuple[str, ...]]:
    from connectors.files import read_history, read_lab
    from connectors.lab_results import place_lab
    from softsensor.recorded_data import lab_arrivals, lab_tags
    from softsensor.service.assembly import rules_of
    from softsensor.service.tuning import tune as tune_model
    from softsensor.service.tuning import tune_intervals

    recorded = read_history(history, rules_of(model.spec).tags, timezone)
    if lab is None:
        return tune_model(model, recorded, (), keep or ()), ()
    results = read_lab(lab, lab_tags(model), timezone)
    usable, notes = place_lab(results, recorded.first_time, recorded.last_time)
    arrivals = lab_arrivals(model, usable)
    if keep is None:
        return tune_intervals(model, recorded, arrivals), notes
    return tune_model(model, recorded, arrivals, keep), notes


def _write(model: Path, out: Path, report: TuningReport) -> None:
    """The new file gets its name once it is whole."""
    from softsensor.service.tuned_file import changed_text

    text = changed_text(model.read_bytes().decode("utf-8"), str(model), report.changes)
    partial = out.with_name(f"{out.name}.partial")
    try:
        partial.write_bytes(text.encode("utf-8"))
        partial.replace(out)
    except OSError as error:
        raise Problem(f"--out: {out}: {error.strerror or error}; expected a place to write to") from None


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
        typer.echo(_sensor_text(sensor))
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


def _sensor_text(item: Whiteness) -> str:
    return (
        f"{item.tag}, not fitted: nis {item.nis_before:.3f} -> {item.nis_after:.3f} (1 is right), whiteness "
        f"{item.whiteness_before:+.3f} -> {item.whiteness_after:+.3f} (white within {item.bound:.3f})"
    )


def _interval_text(item: IntervalProposal) -> str:
    if not item.results:
        return f"{item.tag}: interval_scale {item.scale:g} {item.reason}"
    return (
        f"{item.tag}: {item.coverage:.1%} of {item.results} laboratory results inside the 95 % interval "
        f"({item.coverage_low:.1%} to {item.coverage_high:.1%}); interval_scale {item.scale_before:g} -> "
        f"{item.scale:g}, then {item.coverage_scaled:.1%}; {item.reason}"
    )
