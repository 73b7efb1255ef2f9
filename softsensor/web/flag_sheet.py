"""One flag for the workshop: what was seen, how sure it is, what it does to the estimate, what to check and where."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from markupsafe import Markup

from plant_models.specification import EstimateSpec, InputSpec, SensorSpec, UnitSpec
from softsensor.published import published_one
from softsensor.records import decisions
from softsensor.records.reader import StoredFlag, Unit
from softsensor.records.series import TimedResults
from softsensor.web.chart_data import Columns, Window, sensor_columns
from softsensor.web.likely_causes import FIRST_LETTERS, causes_of, check_of
from softsensor.web.picture import Picture, course_of, svg_of
from softsensor.web.rows import latest_cycle, tag_decimals, tag_units
from softsensor.web.site import Site

LEAST_MARGIN_US = 1_800_000_000
LONGEST_US = 7 * 86_400_000_000
NEAR = 0.05
"""Reference points lie at the operating value and this share of the range below and above it."""


@dataclass(frozen=True)
class Effect:
    """An estimate's settled sd with the sensor and without it, and its sd now; None where it has none."""

    tag: str
    unit: str
    decimals: int
    sd_with: float
    sd_without: float
    sd_now: float | None


@dataclass(frozen=True)
class Sheet:
    """Everything on the sheet besides the flag itself."""

    item: SensorSpec | InputSpec | None
    measures: str
    units: dict[str, str]
    decimals: dict[str, int]
    pictures: tuple[tuple[str, Markup], ...]
    effects: tuple[Effect, ...]
    operating_value: float
    points: tuple[float, ...]
    causes: tuple[str, ...]
    check: str
    left_out: tuple[decisions.LeftOut, ...]


def flag_sheet(site: Site, unit: Unit, flag: StoredFlag) -> Sheet:
    """The sheet of a flag, from the records and the unit's model."""
    revision = site.models.revision_of(unit)
    spec = site.models.spec(revision)
    item = _item(spec, flag.tag)
    sensors = [sensor.tag for sensor in spec.sensors]
    out = tuple(decisions.left_out_of(site.database, unit.id, flag.tag))
    pictures: tuple[tuple[str, Markup], ...] = ()
    seen = float("nan")
    if flag.tag in sensors:
        window = _window(flag, _newest(site, unit))
        columns = sensor_columns(site.database, site.models, unit, flag.tag, window)
        units = item.unit if item is not None else ""
        pictures = _pictures(flag, window, columns, units, out)
        seen = _before(flag, columns)
    value = seen if np.isfinite(seen) else item.operating_point if item is not None else float("nan")
    return Sheet(
        item,
        FIRST_LETTERS.get(flag.tag[:1].upper(), "by its tag not known"),
        tag_units(spec),
        tag_decimals(spec),
        pictures,
        _effects(site, unit, flag.tag),
        value,
        reference_points(item, value),
        causes_of(flag.tag, flag.kind),
        check_of(flag.tag, flag.kind),
        out,
    )


def reference_points(item: SensorSpec | InputSpec | None, value: float) -> tuple[float, ...]:
    """The operating value and a little below and above it, within the range of the instrument; round numbers, so that a
    printed sheet and the screen an hour later say the same."""
    if item is None or not np.isfinite(value):
        return ()
    low, high = item.range
    step = NEAR * (high - low)
    middle = min(max(value, low + step), high - step)
    unit = 10.0 ** math.floor(math.log10(step / 2.0))
    return tuple(round(point / unit) * unit for point in (middle - step, middle, middle + step))


def _item(spec: UnitSpec, tag: str) -> SensorSpec | InputSpec | None:
    items: tuple[SensorSpec | InputSpec, ...] = (*spec.sensors, *spec.inputs)
    return next((item for item in items if item.tag == tag), None)


def _newest(site: Site, unit: Unit) -> int:
    latest, _ = latest_cycle(site.database, unit, site.models.revision_of(unit))
    return site.database.clock() if latest is None else int(latest.times[-1])


def _window(flag: StoredFlag, newest: int) -> Window:
    """From before the onset to now, or to a while after the flag was cleared; a week at most."""
    margin = max(LEAST_MARGIN_US, (flag.detected_us - flag.onset_us) // 2)
    end = newest if flag.cleared_us is None else min(newest, flag.cleared_us + margin)
    end = max(end, flag.detected_us + 1)
    return Window(max(flag.onset_us - margin, end - LONGEST_US), end)


def _before(flag: StoredFlag, columns: dict[str, Columns]) -> float:
    """The median of the predictions since the onset: what the process really did, as far as anybody knows."""
    found = [
        value
        for time, value in zip(columns["predicted"]["x"], columns["predicted"]["value"], strict=True)
        if time is not None and value is not None and time * 1000 >= flag.onset_us
    ]
    return float(np.median(found)) if found else float("nan")


def _pictures(
    flag: StoredFlag,
    window: Window,
    columns: dict[str, Columns],
    unit: str,
    out: tuple[decisions.LeftOut, ...],
) -> tuple[tuple[str, Markup], ...]:
    start, end = window.from_us / 1000.0, window.to_us / 1000.0
    flagged = (
        flag.onset_us / 1000.0,
        end if flag.cleared_us is None else flag.cleared_us / 1000.0,
        "flagged",
    )
    bands = [flagged]
    for item in out:
        begin, stop = item.since_us / 1000.0, end if item.until_us is None else item.until_us / 1000.0
        if begin < end and stop > start:
            bands.append((begin, stop, "left-out"))
    reading = Picture(
        f"{flag.tag}: reading and prediction",
        unit,
        start,
        end,
        (course_of("reading", columns["reading"]), course_of("predicted", columns["predicted"])),
        tuple(bands),
    )
    sums = Picture(
        f"{flag.tag}: furthest cumulative sums",
        "of its decision interval",
        start,
        end,
        (course_of("high", columns["high"]), course_of("low", columns["low"])),
        tuple(bands),
        (1.0,),
    )
    return (("seen", svg_of(reading)), ("sums", svg_of(sums)))


def _published_sd(item: EstimateSpec, latest: TimedResults, e: int) -> float:
    return published_one(item, float(latest.results.estimate[-1, e]), float(latest.results.sd[-1, e]))[1]


def _effects(site: Site, unit: Unit, tag: str) -> tuple[Effect, ...]:
    revision = site.models.revision_of(unit)
    spec = site.models.spec(revision)
    if tag not in [sensor.tag for sensor in spec.sensors]:
        return ()
    latest, _ = latest_cycle(site.database, unit, revision)
    decimals, found = tag_decimals(spec), []
    for e, known in enumerate(site.models.knowledge(revision)):
        now = None if latest is None else _published_sd(spec.estimates[e], latest, e)
        found.append(
            Effect(
                known.tag,
                known.unit,
                decimals[known.tag] + 1,
                known.sd_with_sensors,
                dict(known.sd_without)[tag],
                now if now is not None and np.isfinite(now) else None,
            )
        )
    return tuple(found)
