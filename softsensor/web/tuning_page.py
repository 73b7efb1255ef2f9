"""The report of a tuning as one HTML page: for paper and for the file of the change, without a script."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from markupsafe import Markup

from plant_models.durations import format_duration
from plant_models.number_text import plain
from plant_models.specification import UnitSpec
from plant_models.units import difference_unit
from softsensor import __version__
from softsensor.estimation.noise_tuning.parameters import noise_parameters
from softsensor.service.tuning_report import (
    FittedNumber,
    InnovationCourse,
    TuningReport,
    Whiteness,
    WhitenessCourse,
)
from softsensor.web.templating import templates
from softsensor.web.tuning_pictures import correlation_picture, lab_picture, periodogram_picture


@dataclass(frozen=True)
class Row:
    """One number of the model file: before, fitted, its 95 % interval, what is in the new file, and why."""

    name: str
    before: str
    fitted: str
    interval: str
    written: str
    why: str


@dataclass(frozen=True)
class SensorPart:
    """A sensor's figures, in words what they say, and its two pictures."""

    seen: Whiteness
    verdict: str
    correlation: Markup
    periodogram: Markup


def tuning_page(spec: UnitSpec, report: TuningReport, document: dict[str, Any]) -> str:
    """The page.

    :param document: the same report as ``--json`` prints it: where it was written to, notes, caution.
    """
    units = {item.tag: difference_unit(item.unit) for item in spec.estimates}
    step = format_duration(spec.sample_time)
    sensors = [
        SensorPart(
            seen, verdict(seen, course), correlation_picture(course, step), periodogram_picture(course)
        )
        for seen, course in zip(report.sensors, report.courses, strict=True)
    ]
    pictures = {
        course.tag: lab_picture(course, units[course.tag])
        for course in report.lab_courses
        if len(course.times)
    }
    page = templates().get_template("tuning_report.html")
    return page.render(
        spec=spec,
        report=report,
        document=document,
        rows=number_rows(spec, report),
        scales=scale_rows(report),
        sensors=sensors,
        pictures=pictures,
        fitted=bool(report.numbers),
        sample_time=step,
        version=__version__,
    )


def number_rows(spec: UnitSpec, report: TuningReport) -> list[Row]:
    """Every noise of the model: those fitted, and those that stay as they are with the reason."""
    fitted = {item.parameter.name: item for item in report.numbers}
    rows = []
    for item in noise_parameters(spec):
        before = _value(item.key, item.value)
        found = fitted.get(item.name)
        if found is not None:
            rows.append(_fitted_row(found, before, report.accepted))
        elif report.accepted or report.numbers:
            rows.append(Row(item.name, before, "not fitted", "", before, "kept, as asked for"))
        else:
            rows.append(Row(item.name, before, "not fitted", "", before, "kept: refused before any fit"))
    return rows


def _fitted_row(item: FittedNumber, before: str, accepted: bool) -> Row:
    key = item.parameter.key
    known = math.isfinite(item.low) and math.isfinite(item.high)
    unit = _time_unit(item.fitted)
    ends = [_in_unit(end, unit) if key == "time_constant" else plain(end, 4) for end in (item.low, item.high)]
    interval = f"{ends[0]} to {ends[1]}" if known else "not known"
    written, why = (_value(key, item.written), "written") if accepted else (before, "not written: refused")
    return Row(item.parameter.name, before, _value(key, item.fitted), interval, written, why)


def scale_rows(report: TuningReport) -> list[Row]:
    """The factor of each estimate's interval."""
    rows = []
    for item in report.intervals:
        before, scale = plain(item.scale_before, 3), plain(item.scale, 3)
        written = scale if report.accepted else before
        changed = "written: " if item.scale != item.scale_before and report.accepted else ""
        refused = "not written, refused; " if not report.accepted else ""
        rows.append(
            Row(f"{item.tag}.interval_scale", before, scale, "", written, f"{refused}{changed}{item.reason}")
        )
    return rows


def _value(key: str, value: float) -> str:
    """A number of the file with four digits; a time in the unit that suits it.

    >>> _value("noise_sd", 0.123456), _value("time_constant", 5400.0)
    ('0.1235', '1.5 h')
    """
    if not math.isfinite(value):
        return "not known"
    if key != "time_constant":
        return plain(value, 4)
    return _in_unit(value, _time_unit(value))


def _time_unit(value: float) -> tuple[float, str]:
    """Seconds of the unit in which a time is told, and its name."""
    units = ((86400.0, "d"), (3600.0, "h"), (60.0, "min"))
    return next((unit for unit in units if value >= unit[0]), (1.0, "s"))


def _in_unit(value: float, unit: tuple[float, str]) -> str:
    return f"{plain(value / unit[0], 4)} {unit[1]}"


def verdict(seen: Whiteness, course: InnovationCourse) -> str:
    """What a sensor's figures say, with the numbers that count in the end."""
    if not math.isfinite(seen.nis_after) or not math.isfinite(seen.periodogram_bound):
        return "Too few readings to say anything."
    texts = []
    spread = 1.96 * math.sqrt(2.0 / seen.readings)
    if abs(seen.nis_after - 1.0) <= max(spread, 0.1):
        texts.append("The innovations are as large as the model says.")
    else:
        ratio = plain(math.sqrt(seen.nis_after), 3)
        texts.append(f"The innovations' sd is {ratio} times what the model says.")
    if seen.periodogram_after <= seen.periodogram_bound:
        texts.append("They are white, as far as these readings can tell.")
    elif _leans_low(course.after or course.before):
        texts.append(
            "They have too much power at low frequencies: the model follows too slowly or wrongly, or a disturbance is "
            "missing or too small."
        )
    else:
        texts.append(
            "They have too much power at high frequencies: the filter follows the noise, because noise_sd is too small "
            "or a disturbance too large."
        )
    return " ".join(texts)


def _leans_low(course: WhitenessCourse) -> bool:
    """Does the cumulative periodogram stray furthest above the straight line?"""
    distance = course.share - 2.0 * course.frequency
    return bool(len(distance)) and float(distance[int(np.argmax(np.abs(distance)))]) > 0.0
