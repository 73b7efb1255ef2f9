"""A past period for review: what was published live, and beside it the estimates given what came afterwards."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from markupsafe import Markup
from numpy.typing import NDArray

from plant_models.specification import EstimateSpec, UnitSpec
from softsensor.published import NORMAL_95, published
from softsensor.records import decisions, reader, series
from softsensor.records.reader import StoredFlag, StoredLab, Unit
from softsensor.service.smoothed_window import LONGEST, SmoothedWindow, smoothed_window
from softsensor.web.chart_data import (
    Columns,
    Track,
    Window,
    estimate_band,
    lab_columns,
    revised_columns,
    tracks_of,
)
from softsensor.web.picture import Marks, Picture, area_of, course_of, svg_of
from softsensor.web.review_period import Period, longest_hours
from softsensor.web.rows import tag_decimals
from softsensor.web.site import BadForm, Site

LAB_MARKS = (
    ("lab used", "lab-used", "circle"),
    ("lab waiting", "lab-waiting", "diamond"),
    ("lab left out", "lab-left-out", "cross"),
)


@dataclass(frozen=True)
class AtCycle:
    """An estimate at one cycle in its unit, and whether a laboratory result lies within its 95 % interval."""

    value: float
    lower: float
    upper: float
    holds: bool


@dataclass(frozen=True)
class LabLine:
    """A laboratory result beside both estimates at the cycle at which it counts; None where there is none."""

    lab: StoredLab
    live: AtCycle | None
    smoothed: AtCycle | None


@dataclass(frozen=True)
class Inside:
    """How many of the results used lie inside an interval."""

    count: int
    of: int


@dataclass(frozen=True)
class Figures:
    """Live and smoothed compared over the cycles that have both, in the estimate's unit; half-widths are of the 95 %
    intervals. ``judged`` counts the laboratory's own error too, as each result was judged when it came.
    """

    cycles: int
    mean: float
    largest: float
    largest_us: int
    live_half: float
    smoothed_half: float
    live: Inside
    smoothed: Inside
    judged: Inside


@dataclass(frozen=True)
class EstimateReview:
    """One estimate over the period; ``figures`` None where no cycle is smoothed."""

    item: EstimateSpec
    decimals: int
    picture: Markup
    figures: Figures | None
    labs: tuple[LabLine, ...]


@dataclass(frozen=True)
class Review:
    """All that the page shows; no estimates where no cycle is on record in the period."""

    period: Period
    newest_us: int
    estimates: tuple[EstimateReview, ...]
    smoothed: SmoothedWindow | None
    flags: tuple[StoredFlag, ...]


def review_of(site: Site, unit: Unit, period: Period, newest_us: int) -> Review:
    """The review of a period, from the records.

    :raises BadForm: the period has too many cycles.
    """
    window = Window(period.from_us + 1, period.until_us + 1)
    revision = site.models.revision_of(unit)
    _refuse_too_long(site.models.spec(revision), period)
    cycles = series.cycles_between(site.database, unit.id, window.from_us, window.to_us)
    if not cycles:
        return Review(period, newest_us, (), None, ())
    found = smoothed_window(site.database, unit.id, revision, cycles, site.models.design)
    spec = site.models.spec(revision if found is None else found.revision_id)
    tags = [item.tag for item in spec.estimates]
    tracks = tracks_of(site.database, site.models, unit, tags, window)
    flags = tuple(
        flag
        for flag in reader.flags_of(site.database, unit.id)
        if flag.onset_us < window.to_us and (flag.cleared_us is None or flag.cleared_us >= window.from_us)
    )
    bands = _bands(site, unit, flags, window)
    estimates = []
    for e, item in enumerate(spec.estimates):
        smoothed = _smoothed_track(item, found, e)
        live, labs = tracks[item.tag], _labs_of(site, unit, item, window)
        picture = _picture(site, unit, item, (live, smoothed), window, bands)
        lines = tuple(LabLine(lab, _at(live, lab), _at(smoothed, lab)) for lab in labs)
        figures = _figures(live, smoothed, lines)
        estimates.append(EstimateReview(item, tag_decimals(spec)[item.tag], picture, figures, lines))
    return Review(period, newest_us, tuple(estimates), found, flags)


def _refuse_too_long(spec: UnitSpec, period: Period) -> None:
    if period.hours > longest_hours(spec):
        cycles = period.hours * 3600.0 / spec.sample_time
        raise BadForm(
            f"hours: {period.hours:g}; the period is too long: {cycles:.0f} cycles, expected {LONGEST} at most, which are "
            f"{int(longest_hours(spec))} h"
        )


def _smoothed_track(item: EstimateSpec, found: SmoothedWindow | None, e: int) -> Track:
    nothing = np.empty((0, 2))
    if found is None:
        return Track(*(np.empty(0, dtype=np.int64),) * 2, *(np.empty(0),) * 3, nothing)
    shown = published(item, found.cycles.estimate[:, e], found.cycles.sd[:, e])
    times = found.cycles.times
    return Track(times, np.arange(len(times)), shown.value, shown.lower, shown.upper, nothing)


def _labs_of(site: Site, unit: Unit, item: EstimateSpec, window: Window) -> list[StoredLab]:
    if item.lab is None:
        return []
    found = reader.lab_results_of(site.database, unit.id, window.from_us, window.to_us)
    return [lab for lab in found if lab.tag == item.lab.tag]


def _at(track: Track, lab: StoredLab) -> AtCycle | None:
    """The track at the first cycle at or after a sample was taken."""
    row = int(np.searchsorted(track.times, lab.sampled_us))
    steps = np.diff(track.times[:2])
    if row >= len(track.times) or (len(steps) and track.times[row] - lab.sampled_us >= steps[0]):
        return None
    value, lower, upper = (float(part[row]) for part in (track.first, track.second, track.third))
    return AtCycle(value, lower, upper, lower <= lab.value <= upper)


def _figures(live: Track, smoothed: Track, labs: tuple[LabLine, ...]) -> Figures | None:
    times, i, j = np.intersect1d(live.times, smoothed.times, assume_unique=True, return_indices=True)
    there = np.isfinite(live.first[i]) & np.isfinite(smoothed.first[j])
    times, i, j = times[there], i[there], j[there]
    if not len(times):
        return None
    difference = smoothed.first[j] - live.first[i]
    worst = int(np.argmax(np.abs(difference)))
    used = [line for line in labs if line.lab.status == "used"]
    return Figures(
        len(times),
        float(np.mean(difference)),
        float(difference[worst]),
        int(times[worst]),
        _half(live, i),
        _half(smoothed, j),
        _inside([line.live for line in used]),
        _inside([line.smoothed for line in used]),
        _judged(used),
    )


def _half(track: Track, rows: NDArray[np.intp]) -> float:
    return float(np.mean(track.third[rows] - track.second[rows])) / 2.0


def _inside(found: list[AtCycle | None]) -> Inside:
    there = [item for item in found if item is not None]
    return Inside(sum(item.holds for item in there), len(there))


def _judged(used: list[LabLine]) -> Inside:
    """As the program's own coverage: the prediction's and the laboratory's error together."""
    judged = [
        abs(line.lab.innovation) <= NORMAL_95 * line.lab.sd
        for line in used
        if line.lab.innovation is not None and line.lab.sd is not None
    ]
    return Inside(sum(judged), len(judged))


def _bands(
    site: Site, unit: Unit, flags: tuple[StoredFlag, ...], window: Window
) -> tuple[tuple[float, float, str], ...]:
    """Flagged periods, and those in which a sensor was left out, as a picture shades them."""
    end = window.to_us
    found = [
        (flag.onset_us, end if flag.cleared_us is None else flag.cleared_us, "flagged") for flag in flags
    ]
    for item in decisions.left_out_of(site.database, unit.id):
        until = end if item.until_us is None else item.until_us
        if item.since_us < end and until > window.from_us:
            found.append((item.since_us, until, "left-out"))
    return tuple((since / 1000.0, until / 1000.0, kind) for since, until, kind in found)


def _picture(
    site: Site,
    unit: Unit,
    item: EstimateSpec,
    tracks: tuple[Track, Track],
    window: Window,
    bands: tuple[tuple[float, float, str], ...],
) -> Markup:
    sample_us = site.models.spec(site.models.revision_of(unit)).sample_time * 1e6
    live, smoothed = (estimate_band(track, window, sample_us) for track in tracks)
    revised = revised_columns(site.database, site.models, unit, item, tracks[0], window, sample_us)
    labs = lab_columns(site.database, unit, item, window)
    drawn = Picture(
        f"{item.tag}: live and smoothed estimate with their 95 % intervals",
        f"{item.tag}, {item.unit}",
        window.from_us / 1000.0,
        window.to_us / 1000.0,
        (course_of("live", live), course_of("revised", revised), course_of("smoothed", smoothed)),
        bands,
        areas=(area_of("live-band", live), area_of("smoothed-band", smoothed)),
        marks=tuple(_marks(labs, *names) for names in LAB_MARKS),
    )
    return svg_of(drawn)


def _marks(labs: dict[str, Columns], source: str, kind: str, shape: str) -> Marks:
    return Marks(kind, shape, labs[source]["x"], labs[source]["value"], source == "lab used")
