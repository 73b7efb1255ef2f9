"""Columns for the charts, from the records: gaps stay gaps, and long stretches are thinned without losing extremes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from plant_models.model_scale import from_model
from plant_models.specification import EstimateSpec, UnitSpec
from softsensor.published import published, published_one
from softsensor.records import reader, series
from softsensor.records.engine import Database
from softsensor.records.reader import StoredFlag, Unit
from softsensor.web.models_in_service import ModelsInService

Floats = NDArray[np.float64]
Columns = dict[str, list[Any]]
BUCKETS = 1000
"""Stretches that keep their smallest and largest value each, where there are more than twice as many points."""
LABEL_SHARE = 0.2
"""Share of the window at its end in which a flag's label stands before its start, so that it can be read."""
GAP_CYCLES = 1.5
"""Sample times between two points beyond which the line breaks."""


@dataclass(frozen=True)
class Window:
    """What part of the records a chart shows; times in UTC microseconds, ``offset_us`` added to what is drawn."""

    from_us: int
    to_us: int
    offset_us: int = 0

    def drawn(self, times: Any) -> Any:
        """UTC microseconds as the milliseconds that are drawn."""
        return (np.asarray(times, dtype=np.float64) + self.offset_us) / 1000.0

    def ends(self) -> dict[str, float]:
        """Where the drawn axis starts and ends."""
        return {"start": float(self.drawn(self.from_us)), "end": float(self.drawn(self.to_us))}


def thinned(times: NDArray[np.int64], values: Floats, buckets: int = BUCKETS) -> NDArray[np.intp]:
    """Indices, ascending, of the points worth drawing: in each of ``buckets`` equal stretches of time the smallest
    and the largest value; all where there are not more than twice as many. Points without a value are left out.
    """
    there = np.flatnonzero(np.isfinite(values))
    if len(there) <= 2 * buckets:
        return there
    bucket = _bucket(times[there], buckets)
    order = np.lexsort((values[there], bucket))
    first = np.flatnonzero(np.diff(bucket[order], prepend=-1))
    last = np.append(first[1:], len(order)) - 1
    return np.unique(there[order[np.concatenate([first, last])]])


def _bucket(times: NDArray[np.int64], buckets: int) -> NDArray[np.int64]:
    span = max(int(times[-1] - times[0]), 1)
    place: NDArray[np.int64] = np.minimum((times - times[0]) * buckets // span, buckets - 1)
    return place


def _extremes(times: NDArray[np.int64], values: Floats, chosen: NDArray[np.intp], largest: bool) -> Floats:
    """At the chosen points the largest (or smallest) value of their whole bucket, so that a thinned band covers all."""
    there = np.flatnonzero(np.isfinite(values))
    if len(chosen) == len(there):
        return values[chosen]
    bucket = _bucket(times[there], BUCKETS)
    pick = np.maximum if largest else np.minimum
    out = np.full(BUCKETS, -np.inf if largest else np.inf)
    pick.at(out, bucket, values[there])
    return out[bucket[np.searchsorted(there, chosen)]]


def with_gaps(
    times: NDArray[np.int64], present: NDArray[np.bool_], chosen: NDArray[np.intp], sample_us: float
) -> NDArray[np.intp]:
    """The chosen indices with -1 wherever a stretch without values lies between two of them."""
    steps = np.diff(times, prepend=times[:1])
    broken = (steps > GAP_CYCLES * sample_us) | ~present
    stretch = np.cumsum(broken)[chosen]
    at = np.flatnonzero(np.diff(stretch)) + 1
    return np.insert(chosen, at, -1)


def column(values: Floats) -> list[float | None]:
    """Numbers for JSON: None where there is none."""
    boxed = values.astype(object)
    boxed[~np.isfinite(values)] = None
    return list(boxed)


def _taken(values: Floats, indices: NDArray[np.intp]) -> list[float | None]:
    return column(np.where(indices < 0, np.nan, values[indices]))


@dataclass(frozen=True)
class Track:
    """One tag's published cycles, in its engineering unit: an estimate (``first``) with the ends of its interval, or a
    sensor's prediction (``first``) with its reading, twice.
    """

    times: NDArray[np.int64]
    cycles: NDArray[np.int64]
    first: Floats
    second: Floats
    third: Floats
    sums: Floats
    """(N, 2), high and low; empty for an estimate."""


def tracks_of(
    database: Database, models: ModelsInService, unit: Unit, tags: Sequence[str], window: Window
) -> dict[str, Track]:
    """The published cycles of several tags, read once."""
    parts: dict[str, list[tuple[Any, ...]]] = {tag: [] for tag in tags}
    cycles = series.cycles_between(database, unit.id, window.from_us, window.to_us)
    for block in series.published(database, unit.id, cycles.start, cycles.stop - 1) if cycles else ():
        spec = models.spec(block.revision_id)
        for tag in tags:
            parts[tag] += _part_of(spec, block, tag)
    return {tag: _joined(found) for tag, found in parts.items()}


def _part_of(spec: UnitSpec, block: series.TimedResults, tag: str) -> list[tuple[Any, ...]]:
    """A tag's columns of one block; none where the block's revision does not know the tag."""
    results = block.results
    numbers = np.arange(len(results), dtype=np.int64) + results.first_cycle
    estimates, sensors = [item.tag for item in spec.estimates], [item.tag for item in spec.sensors]
    if tag in estimates:
        e = estimates.index(tag)
        sums = np.empty((len(results), 2))
        shown = published(spec.estimates[e], results.estimate[:, e], results.sd[:, e])
        return [(block.times, numbers, shown.value, shown.lower, shown.upper, sums)]
    if tag in sensors:
        i, n = sensors.index(tag), len(sensors)
        sums = results.sums[:, [i, n + i]]
        item, predicted = spec.sensors[i], results.predicted[:, i]
        reading = from_model(item, predicted + results.innovation[:, i])
        return [(block.times, numbers, from_model(item, predicted), reading, reading, sums)]
    return []


def _joined(parts: list[tuple[Any, ...]]) -> Track:
    if not parts:
        nothing = np.empty(0, dtype=np.int64)
        return Track(nothing, nothing, np.empty(0), np.empty(0), np.empty(0), np.empty((0, 2)))
    return Track(*(np.concatenate(part) for part in zip(*parts, strict=True)))


def _track(database: Database, models: ModelsInService, unit: Unit, tag: str, window: Window) -> Track:
    return tracks_of(database, models, unit, (tag,), window)[tag]


def estimate_columns(
    database: Database, models: ModelsInService, unit: Unit, item: EstimateSpec, window: Window
) -> dict[str, Columns]:
    """Columns of an estimate's chart, by the name of their source."""
    track = _track(database, models, unit, item.tag, window)
    sample_us = models.spec(models.revision_of(unit)).sample_time * 1e6
    flags = reader.flags_of(database, unit.id)
    return {
        "estimate": estimate_band(track, window, sample_us),
        "revised": revised_columns(database, models, unit, item, track, window, sample_us),
        **lab_columns(database, unit, item, window),
        "flags": flag_columns(flags, window),
    }


def estimate_band(track: Track, window: Window, sample_us: float) -> Columns:
    """An estimate's line and 95 % band; thinned, the band still covers every interval of its stretch."""
    times, value = track.times, track.first
    if not len(times):
        return {"x": [], "value": [], "lower": [], "upper": []}
    chosen = thinned(times, value)
    indices = with_gaps(times, np.isfinite(value), chosen, sample_us)
    spread = np.full(len(times), np.nan), np.full(len(times), np.nan)
    ends = (np.where(np.isfinite(end), end, value) for end in (track.second, track.third))
    spread[0][chosen] = _extremes(times, next(ends), chosen, largest=False)
    spread[1][chosen] = _extremes(times, next(ends), chosen, largest=True)
    return {
        "x": _taken(window.drawn(times), indices),
        "value": _taken(value, indices),
        "lower": _taken(spread[0], indices),
        "upper": _taken(spread[1], indices),
    }


def revised_columns(
    database: Database,
    models: ModelsInService,
    unit: Unit,
    item: EstimateSpec,
    track: Track,
    window: Window,
    sample_us: float,
) -> Columns:
    """The newest revised estimates of a track's cycles, where there are any."""
    tags = [each.tag for each in models.spec(models.revision_of(unit)).estimates]
    if not len(track.cycles) or item.tag not in tags:
        return {"x": [], "value": []}
    e, values = tags.index(item.tag), np.full(len(track.cycles), np.nan)
    place = {int(cycle): k for k, cycle in enumerate(track.cycles)}
    found = series.revised(database, unit.id, int(track.cycles[0]), int(track.cycles[-1]))
    for cycle, revised in found.items():
        if cycle in place and revised.estimate.shape[1] == len(tags):
            mean, sd = float(revised.estimate[0, e]), float(revised.sd[0, e])
            values[place[cycle]] = published_one(item, mean, sd)[0]
    chosen = thinned(track.times, values)
    indices = with_gaps(track.times, np.isfinite(values), chosen, sample_us)
    return {"x": _taken(window.drawn(track.times), indices), "value": _taken(values, indices)}


LAB_SOURCES = {"used": "lab used", "waiting for a person": "lab waiting", "left out": "lab left out"}


def lab_columns(database: Database, unit: Unit, item: EstimateSpec, window: Window) -> dict[str, Columns]:
    """Laboratory results of an estimate, by what became of them."""
    out: dict[str, Columns] = {name: {"x": [], "value": [], "text": []} for name in LAB_SOURCES.values()}
    if item.lab is None:
        return out
    for lab in reader.lab_results_of(database, unit.id, window.from_us, window.to_us):
        if lab.tag == item.lab.tag:
            columns = out[LAB_SOURCES[lab.status]]
            columns["x"].append(float(window.drawn(lab.sampled_us)))
            columns["value"].append(lab.value)
            columns["text"].append(lab.status + (f": {lab.reason}" if lab.reason else ""))
    return out


def flag_columns(flags: list[StoredFlag], window: Window) -> Columns:
    """Flagged periods that touch the window, oldest first; an open one reaches beyond its end."""
    columns: Columns = {"left": [], "right": [], "text": [], "row": [], "align": [], "shift": []}
    width = window.to_us - window.from_us
    beyond = window.to_us + width
    for flag in sorted(flags, key=lambda flag: flag.onset_us):
        end = flag.cleared_us if flag.cleared_us is not None else beyond
        if flag.onset_us < window.to_us and end > window.from_us:
            start = max(flag.onset_us, window.from_us)
            near_end = start > window.to_us - LABEL_SHARE * width
            columns["left"].append(float(window.drawn(start)))
            columns["right"].append(float(window.drawn(end)))
            columns["text"].append(f"{flag.tag} {flag.kind}")
            columns["row"].append(6 + 16 * (len(columns["row"]) % 3))
            columns["align"].append("right" if near_end else "left")
            columns["shift"].append(-4 if near_end else 4)
    return columns


def sensor_columns(
    database: Database, models: ModelsInService, unit: Unit, tag: str, window: Window
) -> dict[str, Columns]:
    """Columns of a sensor's charts: reading and prediction, both sums, flagged periods of the tag."""
    track = _track(database, models, unit, tag, window)
    sample_us = models.spec(models.revision_of(unit)).sample_time * 1e6
    times, predicted, reading = track.times, track.first, track.second
    lines = {"predicted": predicted, "reading": reading}
    if len(times):
        lines |= {"high": track.sums[:, 0], "low": track.sums[:, 1]}
    flags = [flag for flag in reader.flags_of(database, unit.id) if flag.tag == tag]
    out: dict[str, Columns] = {"flags": flag_columns(flags, window)}
    for name in ("predicted", "reading", "high", "low"):
        values = lines.get(name, np.empty(0))
        if not len(values):
            out[name] = {"x": [], "value": []}
            continue
        indices = with_gaps(times, np.isfinite(values), thinned(times, values), sample_us)
        out[name] = {"x": _taken(window.drawn(times), indices), "value": _taken(values, indices)}
    return out


def find_estimate(spec: UnitSpec, tag: str) -> EstimateSpec | None:
    """The estimate of this tag."""
    return next((item for item in spec.estimates if item.tag == tag), None)
