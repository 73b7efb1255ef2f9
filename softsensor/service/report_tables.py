"""The report of a model as tables of text, for the command line and the web page alike: paths and what can be known."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import NamedTuple

from plant_models.number_text import plain
from plant_models.units import difference_unit
from softsensor.estimation.observability import EstimateKnowledge
from softsensor.estimation.what_helps import Change, Prospects
from softsensor.service.model_report import ModelReport, duration_text
from softsensor.service.path_reports import PathReport

ADDED, LOST = 2, 1
"""Changes shown of each estimate: the best, and the losses that hurt most."""


class ReportTable(NamedTuple):
    """``notes``: what a reader must know of it, in sentences. A line break in a cell is one on the page too."""

    title: str
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    notes: tuple[str, ...] = ()


def knowledge_tables(report: ModelReport) -> tuple[ReportTable, ...]:
    """Transforms if any, disturbances, estimates, along schedules if any, where their uncertainty comes from, and what would
    change them.
    """
    estimates = (_estimates(report), *_along_schedules(report))
    return *_scales(report), _disturbances(report), *estimates, _sources(report), _prospects(report)


def paths_table(report: ModelReport) -> ReportTable:
    """Every transfer function."""
    columns = ("from -> to", "steady gain", "time constants", "dead time", "in samples", "shape")
    return ReportTable("Transfer functions", columns, tuple(_path(path) for path in report.paths))


def _path(path: PathReport) -> tuple[str, ...]:
    shape = [
        name
        for name, has in (
            ("integrating", path.integrating),
            ("oscillating", path.oscillating),
            ("inverse response", path.inverse_response),
        )
        if has
    ]
    return (
        f"{path.source} -> {path.target}" + (f" at {path.at}" if path.at else ""),
        f"{plain(path.gain, 4)} {path.gain_unit}",
        ", ".join(duration_text(lag) for lag in path.time_constants) or "none",
        duration_text(path.dead_time),
        plain(path.dead_time_samples, 4),
        ", ".join(shape),
    )


def _along_schedules(report: ModelReport) -> Iterator[ReportTable]:
    """Each estimate while a schedule's tag rests at one of its points."""
    if report.along_schedules:
        rows = tuple(
            (
                item.estimate,
                f"{item.tag} = {plain(item.value)} {item.unit}",
                sd_text(item.sd_without_sensors),
                sd_text(item.sd_with_sensors),
            )
            for item in report.along_schedules
        )
        columns = ("estimate", "while", "no sensors", "all sensors")
        yield ReportTable("Standard deviation of each estimate along the schedule", columns, rows)


def _scales(report: ModelReport) -> Iterator[ReportTable]:
    """Tags with a transform, or with physical limits."""
    if not report.scales:
        return
    rows = tuple(
        (
            item.tag,
            item.transform or "none",
            "" if item.slope is None else f"{plain(abs(item.slope), 3)} per {difference_unit(item.unit)}",
            ""
            if item.slope_from is None or item.slope_to is None
            else f"{plain(item.slope_from, 3)} to {plain(item.slope_to, 3)}",
            "none"
            if item.limits is None
            else f"{plain(item.limits[0])} to {plain(item.limits[1])} {item.unit}",
        )
        for item in report.scales
    )
    notes = (
        "Transfer functions hold between transformed values. Noise, tolerance and bias are taken at the operating point; "
        "their transformed size is the same everywhere. Standard deviations and sizes in this report are those at the "
        "operating point.",
    )
    columns = (
        "tag",
        "transform",
        "slope at operating point",
        "within validated range or range",
        "physical limits",
    )
    transformed = any(item.transform is not None for item in report.scales)
    yield ReportTable("Transforms and physical limits", columns, rows, notes if transformed else ())


def _disturbances(report: ModelReport) -> ReportTable:
    rows = tuple(
        (
            item.name,
            sd_text(item.sd_without_sensors),
            sd_text(item.sd_with_sensors),
            "yes" if item.observable else "no",
        )
        for item in report.disturbances
    )
    columns = ("disturbance", "sd without sensors", "sd with", "seen")
    return ReportTable("What the sensors tell about each disturbance", columns, rows)


def _estimates(report: ModelReport) -> ReportTable:
    columns = ("estimate", "in", "no sensors", "all sensors", "one lost", "after a lab result")
    rows = tuple(
        (
            item.tag,
            difference_unit(item.unit),
            sd_text(item.sd_without_sensors),
            _all_sensors(item),
            "\n".join(f"{tag} {sd_text(sd)}" for tag, sd in item.sd_without),
            "\n".join(_after_lab(item, prospects)),
        )
        for item, prospects in zip(report.estimates, report.prospects, strict=True)
    )
    notes: tuple[str, ...] = ()
    if any(item.own_offset for item in report.estimates):
        notes = (
            "An estimate's own offset (bias_walk_sd) is seen by no sensor: only laboratory results bound it. The columns "
            '"no sensors" and "one lost" leave it out too.',
        )
    return ReportTable("Standard deviation of each estimate", columns, rows, notes)


def _sources(report: ModelReport) -> ReportTable:
    rows = tuple(
        (item.tag if place == 0 else "", difference_unit(item.unit) if place == 0 else "", name, sd_text(sd))
        for item in report.estimates
        for place, (name, sd) in enumerate(item.sd_from)
    )
    columns = ("estimate", "in", "from", "sd that it causes where nothing is measured")
    return ReportTable("Where the uncertainty of each estimate comes from", columns, rows)


def _all_sensors(item: EstimateKnowledge) -> str:
    """The sd with all sensors; where the estimate has an offset of its own that is not all of it."""
    if not item.own_offset:
        return sd_text(item.sd_with_sensors)
    bound = "unbounded without laboratory results"
    return f"{bound}\n{sd_text(item.sd_with_sensors)} without its own offset"


def _after_lab(item: EstimateKnowledge, prospects: Prospects) -> Iterator[str]:
    if item.lab is None:
        yield "no lab results"
        return
    yield f"{sd_text(item.lab.sd)} at once"
    for seconds, sd in prospects.after_result:
        yield f"{sd_text(sd)} after {duration_text(seconds)}"
    yield _helps(item)


def _helps(item: EstimateKnowledge) -> str:
    lab = item.lab
    if lab is None or lab.lasting is None:
        return "how long it helps cannot be told"
    if not lab.growing and lab.sd > 0.99 * item.sd_with_sensors:
        return "no better than the sensors"
    if math.isinf(lab.lasting):
        return "and it stays so"
    return f"{'doubled' if lab.growing else 'half gone'} after {duration_text(lab.lasting)}"


def _prospects(report: ModelReport) -> ReportTable:
    rows = []
    for item in report.prospects:
        unit = difference_unit(item.unit)
        rows.append((item.tag, unit, "as it is", sd_text(item.sd), ""))
        for change in _worth_telling(item):
            rows.append(("", "", change.what, sd_text(change.sd), _share(change.sd, item.sd)))
    regular = [item.lab_interval for item in report.prospects if item.lab_interval is not None]
    notes = (
        (
            f"Where an estimate has laboratory results: one every {duration_text(regular[0])}, the sd just before the "
            "next, its own offset included. softsensor check --lab-interval takes another interval.",
        )
        if regular
        else ()
    )
    columns = ("estimate", "in", "with", "sd", "change")
    return ReportTable("What would change each estimate most", columns, tuple(rows), notes)


def _worth_telling(item: Prospects) -> list[Change]:
    added = [change for change in item.changes if not change.loses]
    lost = [change for change in item.changes if change.loses]
    return [*added[:ADDED], *lost[::-1][:LOST]]


def _share(then: float, now: float) -> str:
    """By how much the sd changes.

    >>> _share(0.9, 1.0), _share(1.001, 1.0), _share(math.inf, 1.0)
    ('-10 %', 'under 1 %', '')
    """
    if not (math.isfinite(then) and 0.0 < now < math.inf):
        return ""
    share = 100.0 * (then / now - 1.0)
    return "under 1 %" if abs(share) < 1.0 else f"{share:+.0f} %"


def sd_text(sd: float) -> str:
    """Three significant digits.

    >>> sd_text(0.0123456), sd_text(math.inf)
    ('0.0123', 'without limit')
    """
    return "without limit" if math.isinf(sd) else plain(sd, 3)
