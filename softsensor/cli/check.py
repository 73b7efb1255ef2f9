"""``softsensor check``: is the model sound, what can it know, which sensor faults can it find."""

from __future__ import annotations

import json as json_text
import math
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from softsensor.detection.absorption import SensorShift
    from softsensor.estimation.observability import EstimateKnowledge
    from softsensor.service.model_report import ModelReport


def check(
    model: Annotated[Path, typer.Argument(help="The model file (TOML).")],
    json: Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")] = False,
) -> None:
    """Is the model sound, what can it know, which sensor faults can it find? Exit status 1: not a soft
    sensor.
    """
    from softsensor.service.model_report import model_report
    from softsensor.unit_design import load_model

    report = model_report(load_model(model))
    if json:
        typer.echo(json_text.dumps(as_document(report), ensure_ascii=False, allow_nan=False))
    else:
        _tell(report)
    if not report.sound:
        raise typer.Exit(1)


def as_document(report: ModelReport) -> dict[str, Any]:
    """The report as JSON takes it: an infinite number (without limit) becomes null; every duration is in seconds
    (sample_time, false_flag_interval, time_constants, dead_time, half_faded, delay, lasting), every sd in the unit beside
    it, as a difference.
    """
    from softsensor.service.model_report import CAUTION

    document: dict[str, Any] = _finite(asdict(report))
    for item, estimate in zip(document["estimates"], report.estimates, strict=True):
        item["sensors_help"] = estimate.sensors_help
        item["sd_total"] = None if estimate.own_offset else _finite(estimate.sd_with_sensors)
        item["sd_without"] = {tag: _finite(sd) for tag, sd in estimate.sd_without}
        item["sd_from"] = {name: _finite(sd) for name, sd in estimate.sd_from}
    for item, disturbance in zip(document["disturbances"], report.disturbances, strict=True):
        item["observable"] = disturbance.observable
    for item in document["sensors"]:
        item["shift"]["absorbed"] = item["absorbed"]
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

    console = Console(highlight=False)
    if not console.is_terminal:
        console = Console(highlight=False, width=120)
    console.print(f"{report.unit}: {report.title}", markup=False)
    for table in (_paths(report), _disturbances(report), _estimates(report), _sensors(report)):
        console.print()
        console.print(table)
    console.print()
    _tell_rest(console, report)
    console.print(CAUTION, markup=False)


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
    if any(item.own_offset for item in report.estimates):
        console.print(
            "An estimate's own offset (bias_walk_sd) is seen by no sensor: only laboratory results bound it. The columns "
            '"no sensors" and "one lost" leave it out too.'
        )
    for warning in report.warnings:
        console.print(f"Warning: {warning}.", markup=False)
    verdict = "the sensors add to every estimate" if report.sound else "NOT a soft sensor for every estimate"
    console.print(f"Verdict: {verdict}.", markup=False)


def _directions(count: int) -> str:
    return f"{count} direction{'' if count == 1 else 's'}"


def _table(title: str, *columns: str) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(title=title, title_justify="left", box=box.SIMPLE)
    for place, column in enumerate(columns):
        table.add_column(column, justify="left" if place == 0 else "right", overflow="fold")
    return table


def _row(table: Table, *cells: str) -> None:
    from rich.text import Text

    table.add_row(*(Text(cell) for cell in cells))


def _paths(report: ModelReport) -> Table:
    from softsensor.service.model_report import duration_text

    table = _table(
        "Transfer functions",
        "from -> to",
        "steady gain",
        "time constants",
        "dead time",
        "in samples",
        "shape",
    )
    for path in report.paths:
        shape = [
            name
            for name, has in (
                ("integrating", path.integrating),
                ("oscillating", path.oscillating),
                ("inverse response", path.inverse_response),
            )
            if has
        ]
        _row(
            table,
            f"{path.source} -> {path.target}",
            f"{path.gain:.4g} {path.gain_unit}",
            ", ".join(duration_text(lag) for lag in path.time_constants) or "none",
            duration_text(path.dead_time),
            f"{path.dead_time_samples:.4g}",
            ", ".join(shape),
        )
    return table


def _disturbances(report: ModelReport) -> Table:
    table = _table(
        "What the sensors tell about each disturbance", "disturbance", "sd without sensors", "sd with", "seen"
    )
    for item in report.disturbances:
        _row(
            table,
            item.name,
            _sd(item.sd_without_sensors),
            _sd(item.sd_with_sensors),
            "yes" if item.observable else "no",
        )
    return table


def _estimates(report: ModelReport) -> Table:
    from plant_models.units import difference_unit

    table = _table(
        "Standard deviation of each estimate",
        "estimate",
        "in",
        "no sensors",
        "all sensors",
        "one lost",
        "after a lab result",
    )
    for item in report.estimates:
        lost = "\n".join(f"{tag} {_sd(sd)}" for tag, sd in item.sd_without)
        lab = "no lab results"
        if item.lab is not None:
            lab = f"{_sd(item.lab.sd)}, {_helps(item)}"
        _row(
            table,
            item.tag,
            difference_unit(item.unit),
            _sd(item.sd_without_sensors),
            _all_sensors(item),
            lost,
            lab,
        )
    return table


def _sensors(report: ModelReport) -> Table:
    from softsensor.service.model_report import duration_text

    table = _table(
        f"A lasting bias of each sensor's tolerance (one false flag per "
        f"{duration_text(report.false_flag_interval)})",
        "sensor",
        "bias",
        "shift at once",
        "half faded",
        "shift settled",
        "taken up by",
        "reference value / decision interval",
        "flag, once settled",
    )
    for item in report.sensors:
        shift = item.shift
        _row(
            table,
            shift.tag,
            f"{shift.bias:.4g} {shift.unit}",
            f"{shift.at_once:.2f} sd",
            _half_faded(shift),
            f"{shift.settled:.2g} sd",
            shift.absorbed_by or "",
            f"{item.reference:.3f} / {item.interval:.3f}",
            "absorbed" if item.delay is None else duration_text(item.delay),
        )
    return table


def _half_faded(shift: SensorShift) -> str:
    from softsensor.service.model_report import duration_text

    if shift.absorbed_by is None:
        return "never"
    return "later" if shift.half_faded is None else duration_text(shift.half_faded)


def _all_sensors(item: EstimateKnowledge) -> str:
    """The sd with all sensors; where the estimate has an offset of its own that is not all of it."""
    if not item.own_offset:
        return _sd(item.sd_with_sensors)
    bound = "unbounded without laboratory results"
    return f"{bound}\n{_sd(item.sd_with_sensors)} without its own offset"


def _helps(item: EstimateKnowledge) -> str:
    from softsensor.service.model_report import duration_text

    lab = item.lab
    if lab is None or lab.lasting is None:
        return "how long it helps cannot be told"
    if not lab.growing and lab.sd > 0.99 * item.sd_with_sensors:
        return "no better than the sensors"
    if math.isinf(lab.lasting):
        return "and it stays so"
    return f"{'doubled' if lab.growing else 'half gone'} after {duration_text(lab.lasting)}"


def _sd(sd: float) -> str:
    return "without limit" if math.isinf(sd) else f"{sd:.3g}"
