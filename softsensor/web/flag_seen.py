"""What stands behind a flag, from the records: pictures, what could explain it, and how large the error is now."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from markupsafe import Markup

from plant_models.model_scale import bias_in_unit, in_model_scale
from plant_models.specification import InputSpec, SensorSpec, UnitSpec
from softsensor.estimation.kernel import Floats
from softsensor.records import decisions, series
from softsensor.records.decisions import LeftOut
from softsensor.records.reader import StoredFlag, Unit
from softsensor.records.series import Times
from softsensor.web.chart_data import Columns, Window, sensor_columns
from softsensor.web.picture import Picture, course_of, svg_of
from softsensor.web.rows import latest_cycle
from softsensor.web.site import Site

LEAST_MARGIN_US = 1_800_000_000
LONGEST_US = 7 * 86_400_000_000
HOUR_US = 3_600_000_000
LEAST_READINGS = 3
"""Fewer in an hour say nothing of the present error."""
FOLLOWED = (
    "not known: the reading still counts in the estimate, so the estimate follows its error. Nothing newer than the size at "
    "detection can be said."
)


@dataclass(frozen=True)
class Explanation:
    """One line of what could explain a flag: its name, what it would mean, its probability at detection."""

    name: str
    meaning: str
    probability: float


@dataclass(frozen=True)
class ErrorNow:
    """The present size of an error and its sd in the tag's unit, and how it was found; or why nothing can be said."""

    text: str
    size: float | None = None
    sd: float | None = None


@dataclass(frozen=True)
class Seen:
    """What the records hold about a flag besides the flag itself."""

    item: SensorSpec | InputSpec | None
    pictures: tuple[tuple[str, Markup], ...]
    explanations: tuple[Explanation, ...]
    now: ErrorNow | None
    """None where the fault has no size, or is over."""
    left_out: tuple[LeftOut, ...]
    operating_value: float
    """The median prediction since the onset, nan without one: what the process really did, as far as anybody knows."""


def seen_of(site: Site, unit: Unit, flag: StoredFlag) -> Seen:
    """All of it, from the records and the unit's model."""
    revision = site.models.revision_of(unit)
    spec = site.models.spec(revision)
    items: tuple[SensorSpec | InputSpec, ...] = (*spec.sensors, *spec.inputs)
    item = next((item for item in items if item.tag == flag.tag), None)
    out = tuple(decisions.left_out_of(site.database, unit.id, flag.tag))
    latest, _ = latest_cycle(site.database, unit, revision)
    newest = site.database.clock() if latest is None else int(latest.times[-1])
    pictures: tuple[tuple[str, Markup], ...] = ()
    value = float("nan")
    if isinstance(item, SensorSpec):
        window = _window(flag, newest)
        columns = sensor_columns(site.database, site.models, unit, flag.tag, window)
        pictures = _pictures(flag, window, columns, item.unit, out)
        value = _median_prediction(flag, columns)
    now = [row for row in out if latest is not None and row.covers(newest)]
    return Seen(
        item,
        pictures,
        tuple(Explanation(name, meaning(spec, name), share) for name, share in flag.hypotheses),
        _error_now(site, unit, flag, item, now, newest),
        out,
        value,
    )


def meaning(spec: UnitSpec, name: str) -> str:
    """What it would mean if this were the explanation."""
    if any(
        name in tags for tags in ([item.tag for item in spec.sensors], [item.tag for item in spec.inputs])
    ):
        return "this instrument reads wrong"
    if name in [item.name for item in spec.disturbances]:
        return "the process moved"
    if " -> " in name:
        return "the model no longer fits"
    return "chance alone" if name == "nothing" else ""


def _error_now(
    site: Site,
    unit: Unit,
    flag: StoredFlag,
    item: SensorSpec | InputSpec | None,
    out: list[LeftOut],
    newest: int,
) -> ErrorNow | None:
    if flag.kind not in ("bias", "drift") or flag.cleared_us is not None or item is None:
        return None
    if isinstance(item, InputSpec):
        return ErrorNow(
            text="not known: it is an input, and nothing newer than the size at detection can be said."
        )
    if any(row.by_person for row in out):
        return ErrorNow(
            text="not known: it is left out while people work on it: what it reads now means nothing."
        )
    if not out:
        return ErrorNow(FOLLOWED)
    since = max(newest - HOUR_US, *(row.since_us for row in out))
    return _present_error(site, unit, item, Window(since, newest + 1), flag.kind == "drift")


def _present_error(site: Site, unit: Unit, item: SensorSpec, window: Window, growing: bool) -> ErrorNow:
    """Reading less prediction of a sensor that is left out, in the engineering unit at the operating point.

    Its mean; of a drift the end of the straight line through it, whose variance is up to four times as large. The
    prediction's errors are alike over an hour and do not average out, the noise does::

        sd^2 = (mean(innovation sd^2 - noise sd^2) + noise sd^2 / n) * (4 for a line's end)
    """
    times, values, known, noise = _innovations(site, unit, item.tag, window)
    n = len(values)
    if n < LEAST_READINGS:
        return ErrorNow(f"not known: it has had {n or 'no'} reading{'' if n == 1 else 's'} in the last hour")
    variance = max(float(np.mean(known)) - noise**2, 0.0) + noise**2 / n
    if growing:
        ago = (times - window.to_us + 1) / HOUR_US
        now = np.polyfit(ago, values, 1)[1]
        text = f"reading less prediction, by a straight line through the last hour on record, {n} readings"
        size, sd = bias_in_unit(item, float(now), 2.0 * variance**0.5)
        return ErrorNow(text, size, sd)
    text = f"mean of reading less prediction over the last hour on record, {n} readings"
    size, sd = bias_in_unit(item, float(np.mean(values)), variance**0.5)
    return ErrorNow(text, size, sd)


def _innovations(site: Site, unit: Unit, tag: str, window: Window) -> tuple[Times, Floats, Floats, float]:
    """Times, innovations and their variances of a sensor's readings, and its noise sd; in model scale."""
    cycles = series.cycles_between(site.database, unit.id, window.from_us, window.to_us)
    parts: list[tuple[Times, Floats, Floats]] = [(np.empty(0, dtype=np.int64), np.empty(0), np.empty(0))]
    noise = float("nan")
    for block in series.published(site.database, unit.id, cycles.start, cycles.stop - 1) if cycles else ():
        spec = site.models.spec(block.revision_id)
        tags = [sensor.tag for sensor in spec.sensors]
        if tag not in tags:
            continue
        i = tags.index(tag)
        noise = in_model_scale(spec).sensors[i].noise_sd
        innovation = block.results.innovation[:, i]
        there = np.isfinite(innovation)
        parts.append((block.times[there], innovation[there], block.results.innovation_sd[there, i] ** 2))
    times, values, known = (np.concatenate(part) for part in zip(*parts, strict=True))
    return times, values, known, noise


def _window(flag: StoredFlag, newest: int) -> Window:
    """From before the onset to now, or to a while after the flag was cleared; a week at most."""
    margin = max(LEAST_MARGIN_US, (flag.detected_us - flag.onset_us) // 2)
    end = newest if flag.cleared_us is None else min(newest, flag.cleared_us + margin)
    end = max(end, flag.detected_us + 1)
    return Window(max(flag.onset_us - margin, end - LONGEST_US), end)


def _median_prediction(flag: StoredFlag, columns: dict[str, Columns]) -> float:
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
    out: tuple[LeftOut, ...],
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
