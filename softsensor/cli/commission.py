"""``softsensor commission``: what the fault tests' promise is worth on data that tuning has not seen."""

from __future__ import annotations

import json as json_text
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from plant_models.errors import Problem
from plant_models.number_text import plain

if TYPE_CHECKING:
    from plant_models.plant_model import PlantModel
    from softsensor.commissioning.achieved import RunLengths, SensorRun


def commission(
    model: Annotated[Path, typer.Argument(help="The model file (TOML), tuned.")],
    history: Annotated[
        Path,
        typer.Argument(
            help="CSV or Parquet with a time column: a fault-free stretch that tuning has not seen."
        ),
    ],
    out: Annotated[Path, typer.Option("--out", help="The model file to write; never the one that is read.")],
    lab: Annotated[
        Path | None, typer.Option("--lab", help="Laboratory results of the stretch (CSV or Parquet).")
    ] = None,
    timezone: Annotated[
        str | None, typer.Option("--timezone", help="Zone of times that name none, such as Europe/Berlin.")
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")] = False,
) -> None:
    """Measure the innovations on a fault-free stretch, widen each sensor's decision intervals until the promised time
    between false flags holds, and write the factors into a model file. Exit status 1: tests of some sensor stay disarmed.
    """
    from softsensor.unit_design import load_model

    if out.exists() and model.exists() and out.samefile(model):
        raise Problem(f"--out: {out} is the model file that is read; expected another name")
    found, notes = _measured(load_model(model), history, lab, timezone)
    _write(model, out, found)
    if json:
        typer.echo(json_text.dumps(as_document(found, notes, out), ensure_ascii=False, allow_nan=False))
    else:
        _tell(found, notes, out)
    if found.disarmed:
        raise typer.Exit(1)


def _measured(
    model: PlantModel, history: Path, lab: Path | None, timezone: str | None
) -> tuple[RunLengths, tuple[str, ...]]:
    from connectors.files import read_history, read_lab
    from connectors.lab_results import place_lab
    from softsensor.commissioning.achieved import commission as measure
    from softsensor.recorded_data import lab_arrivals, lab_tags
    from softsensor.service.assembly import rules_of

    recorded = read_history(history, rules_of(model.spec).tags, timezone)
    if lab is None:
        found = measure(model, recorded)
        return found, found.notes
    usable, notes = place_lab(
        read_lab(lab, lab_tags(model), timezone), recorded.first_time, recorded.last_time
    )
    found = measure(model, recorded, lab_arrivals(model, usable))
    return found, (*notes, *found.notes)


def _write(model: Path, out: Path, found: RunLengths) -> None:
    """The new file gets its name once it is whole."""
    from softsensor.service.fault_test_settings import with_fault_tests

    text = with_fault_tests(model.read_bytes().decode("utf-8"), str(model), found.widening, found.disarmed)
    partial = out.with_name(f"{out.name}.partial")
    try:
        partial.write_bytes(text.encode("utf-8"))
        partial.replace(out)
    except OSError as error:
        raise Problem(f"--out: {out}: {error.strerror or error}; expected a place to write to") from None


def as_document(found: RunLengths, notes: tuple[str, ...], out: Path) -> dict[str, Any]:
    """The report as JSON takes it: times are UTC or seconds."""
    from connectors.time_column import time_text
    from softsensor.service.model_report import CAUTION

    return {
        "unit": found.unit,
        "written": str(out),
        "from": time_text(found.first_time),
        "to": time_text(found.last_time),
        "cycles": found.cycles,
        "promised": found.promised,
        "sensors": [_sensor(item) for item in found.sensors],
        "notes": list(notes),
        "caution": CAUTION,
    }


def _sensor(item: SensorRun) -> dict[str, Any]:
    from dataclasses import asdict

    fields: dict[str, Any] = asdict(item)
    own: dict[str, Any] = fields.pop("character")
    return own | fields


def _tell(found: RunLengths, notes: tuple[str, ...], out: Path) -> None:
    from connectors.time_column import time_text
    from softsensor.service.model_report import CAUTION

    typer.echo(
        f"{found.unit}: {found.cycles} cycles from {time_text(found.first_time)} to {time_text(found.last_time)}; promised: "
        f"one false flag per {_time(found.promised)} and sensor"
    )
    for item in found.sensors:
        typer.echo(_line(item))
    for note in notes:
        typer.echo(f"note: {note}")
    typer.echo(f"written to {out}: only [fault_tests] widening and disarmed are changed")
    typer.echo(CAUTION)


def _line(item: SensorRun) -> str:
    seen = item.character
    text = (
        f"{item.tag}: {seen.readings} innovations, mean {seen.mean:+.3f} and sd {seen.sd_ratio:.3f} of the model's sd, "
        f"correlation {seen.lag_one:+.3f} "
        f"at lag one, largest {seen.largest:+.3f} at lag {seen.largest_lag} (whiteness p {seen.portmanteau:.1e}), long-run "
        f"variance {seen.slow:.2f}: one false flag per {_time(item.before)}"
    )
    if item.factor is None:
        return f"{text}; DISARMED: {item.reason}"
    if item.factor == 1.0:
        return f"{text}; nothing is widened (up on the stretch {_often(item.ups_before)})"
    after = "" if item.after is None else f"one per {_time(item.after)}"
    ups = f"up on the stretch {_often(item.ups_before)}, then {item.ups_after}"
    return f"{text}; widened {plain(item.factor)}: {after} ({ups})"


def _often(times: int) -> str:
    return "once" if times == 1 else f"{times} times"


def _time(seconds: float) -> str:
    if not math.isfinite(seconds):
        return "never"
    unit, size = ("d", 86400.0) if seconds >= 86400.0 else ("h", 3600.0)
    return f"{plain(seconds / size, 3)} {unit}"
