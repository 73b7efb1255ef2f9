"""The detectability sheet as tables of text, for the command line and the web page alike."""

from __future__ import annotations

from plant_models.number_text import plain
from softsensor.detection.absorption import SensorShift
from softsensor.detection.detectability import HORIZONS
from softsensor.detection.sheet import NAMED, FaultTold, SheetLine
from softsensor.service.model_report import ModelReport, duration_text
from softsensor.service.report_tables import ReportTable
from softsensor.service.second_instrument import Mend

SPOKEN = tuple(duration_text(horizon).replace("1 d", "24 h") for horizon in HORIZONS)
"""The times of the sheet in words."""


def sheet_tables(report: ModelReport) -> tuple[ReportTable, ...]:
    """What is left of a bias, what is found, what it is taken for, and what would mend that."""
    tables = [_shifts(report), _found(report), _inputs(report), _told(report)]
    if report.mends:
        tables.append(_mends(report))
    return tuple(tables)


def _shifts(report: ModelReport) -> ReportTable:
    columns = (
        "sensor",
        "bias",
        "shift at once",
        "half faded",
        "shift settled",
        "taken up by",
        "reference value / decision interval",
        "found within",
    )
    rows = tuple(
        (
            line.shift.tag,
            f"{plain(line.shift.bias, 4)} {line.shift.unit}",
            f"{line.shift.at_once:.2f} sd",
            _half_faded(line.shift),
            f"{plain(line.shift.settled, 2)} sd",
            line.shift.absorbed_by or "",
            "\n".join(f"{k:.3f} / {h:.3f}" for k, h in zip(line.references, line.intervals, strict=True)),
            _tolerance_within(line),
        )
        for line in report.sensors
    )
    title = f"A lasting bias of each sensor's tolerance (one false flag per {duration_text(report.false_flag_interval)})"
    return ReportTable(title, columns, rows)


def _half_faded(shift: SensorShift) -> str:
    if shift.absorbed_by is None:
        return "never"
    return "later" if shift.half_faded is None else duration_text(shift.half_faded)


def _tolerance_within(line: SheetLine) -> str:
    within = line.found.tolerance_within
    if within is None:
        return "absorbed" if line.absorbed else f"not in {SPOKEN[-1]}"
    return duration_text(within) + (",\nby its onset; then absorbed" if line.absorbed else "")


def _found(report: ModelReport) -> ReportTable:
    columns = ("sensor", "step, in", *SPOKEN, "drift, in", *SPOKEN)
    rows = tuple(
        (
            line.shift.tag,
            line.shift.unit,
            *(_size(size, line) for size in line.found.steps),
            f"{line.shift.unit}/d",
            *(_size(size, line) for size in line.found.ramps),
        )
        for line in report.sensors
    )
    notes = [
        "Found: one of the sensor's own sums passes its decision interval within that time after the onset, with 90 % "
        "probability, false flags not counted; the model right, every reading there."
    ]
    if any(None in (*line.found.steps, *line.found.ramps) for line in report.sensors):
        notes.append('"none": not even one as large as the whole range of the sensor.')
    notes += [
        f"{line.shift.tag}: {line.shift.absorbed_by} absorbs what lasts: a step is found by its onset or hardly at all, "
        "and a drift slower than the one printed is followed, by the estimates too."
        for line in report.sensors
        if line.absorbed and line.shift.absorbed_by
    ]
    return ReportTable("Smallest step and slowest drift found within", columns, rows, tuple(notes))


def _inputs(report: ModelReport) -> ReportTable:
    rows = tuple(
        (
            line.tag,
            line.unit,
            *("none" if size is None else plain(size, 3) for size in line.found.steps),
            f"{line.unit}/d",
            *("none" if size is None else plain(size, 3) for size in line.found.ramps),
        )
        for line in report.inputs
    )
    notes = (
        "An input's own instrument shows in the sensors that the input moves: any sum of any sensor finds it.",
    )
    columns = ("input", "step, in", *SPOKEN, "drift, in", *SPOKEN)
    return ReportTable("The same for the instrument of each input", columns, rows, notes)


def _size(size: float | None, line: SheetLine) -> str:
    if size is not None:
        return plain(size, 3)
    return "absorbed" if line.absorbed and line.shift.absorbed_by else "none"


def _told(report: ModelReport) -> ReportTable:
    of_each = [(line.shift.tag, line.shift.unit, line.told) for line in report.sensors]
    of_each += [(line.tag, line.unit, line.told) for line in report.inputs]
    rows = tuple(
        (tag, _fault(fault, unit), duration_text(fault.within), _percent(fault.named), _alike(fault))
        for tag, unit, told in of_each
        for fault in told
    )
    notes = (
        "After a test went up, with the noise drawn many times: how often does the diagnosis name the instrument, and no "
        "other? Else these stand beside it or in its place (share of cases; nothing: no fault at all).",
    )
    columns = ("instrument", "fault", "found within", "named alone", "cannot be told apart from")
    return ReportTable("What a fault is taken for", columns, rows, notes)


def _fault(fault: FaultTold, unit: str) -> str:
    if fault.shape == "step":
        return f"step of {plain(fault.size, 3)} {unit}"
    return f"drift of {plain(fault.size, 3)} {unit}/d"


def _alike(fault: FaultTold) -> str:
    return ", ".join(f"{name} ({_percent(share)})" for name, share in fault.alike)


def _percent(share: float) -> str:
    return f"{100.0 * share:.0f} %"


def _mends(report: ModelReport) -> ReportTable:
    columns = ("sensor", "a second instrument beside", "step in 24 h", "drift in 24 h", "what then is left")
    rows = tuple(_mend(mend) for mend in report.mends)
    return ReportTable("Which instrument would mend it", columns, rows)


def _mend(mend: Mend) -> tuple[str, ...]:
    line = mend.then
    if mend.beside is None or line is None:
        return (mend.tag, "none of them", "", "", "no second instrument makes it better")
    left = "; ".join(
        f"{_fault(fault, line.shift.unit)}: named alone {_percent(fault.named)}, else {_alike(fault)}"
        for fault in line.told
        if fault.named < NAMED
    )
    absorbed = f"absorbed by {line.shift.absorbed_by}" if line.absorbed else ""
    return (
        mend.tag,
        mend.beside,
        f"{_size(line.found.steps[2], line)} {line.shift.unit}",
        f"{_size(line.found.ramps[2], line)} {line.shift.unit}/d",
        "; ".join(text for text in (absorbed, left) if text) or "nothing: found, and named alone",
    )
