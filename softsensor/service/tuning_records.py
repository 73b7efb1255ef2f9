"""Routine operation from the records: readings as cycles used them, without those that say nothing of a sensor's noise.

Left out, as missing: a sensor's readings while it was kept from the estimate, while a flag was open on it or on a group
that it belongs to, and all readings while the tests rested. Taken are the cycles of the revision in service: those of
the model itself where it ran in the period, else those of the revision that ran last.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from plant_models.plant_model import PlantModel
from softsensor.detection.flags import time_words
from softsensor.errors import ReplayError
from softsensor.estimation.lab_results import LabArrival
from softsensor.estimation.late_readings import LateReadings
from softsensor.readings_of_cycle import CycleQuality, CycleReadings, join_readings
from softsensor.records import decisions, series
from softsensor.records.engine import Database, open_database
from softsensor.records.reader import find_unit, flags_of, revisions_of
from softsensor.records.rests import rests_of
from softsensor.service.recorded_period import Period, check_tags, cycles_in, stretches_of
from softsensor.service.resuming import recorded_cycles
from softsensor.service.unit_run import Came

ALL_FLAGS = 1_000_000_000


@dataclass(frozen=True)
class RoutineOperation:
    """What ``tune`` takes from the records: cycles on the sample grid without a gap, laboratory results, what was left
    out, in words.
    """

    readings: CycleReadings
    labs: tuple[LabArrival, ...]
    notes: tuple[str, ...]


@dataclass(frozen=True)
class _Spell:
    """A time whose readings are left out, [since, until) in UTC microseconds, until None for no end; of one sensor, or of
    all where the tag is empty.
    """

    why: str
    tag: str
    since: int
    until: int | None

    def covers(self, times: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Which of these times (N,) lie within."""
        inside = times >= self.since
        return inside if self.until is None else inside & (times < self.until)


def routine_operation(model: PlantModel, url: str, period: Period) -> RoutineOperation:
    """A unit's recorded readings and laboratory results as tuning takes them.

    :raises RecordsError: no such database or unit.
    :raises ReplayError: no cycle is on record in the period, or the cycles do not suit the model.
    """
    with open_database(url) as database:
        unit_id = find_unit(database, period.unit).id
        cycles = cycles_in(database, unit_id, period)
        chosen, notes = _in_service(database, unit_id, cycles, model)
        parts = list(recorded_cycles(database, unit_id, chosen.start, chosen.stop - 1))
        spells = _spells(database, unit_id)
    for part, _ in parts:
        check_tags(model, part, period.unit)
    came = [item for _, items in parts for item in items]
    readings, gaps = on_the_grid([part for part, _ in parts], round(model.spec.sample_time * 1e6))
    _put_in_place(readings, [item for item in came if isinstance(item, LateReadings)])
    left_out = _leave_out(readings, spells, model.sensor_tags)
    labs, rested = _laboratory(came, int(readings.times[0]), spells)
    return RoutineOperation(readings, labs, (*notes, *gaps, *left_out, *rested))


def _in_service(
    database: Database, unit_id: int, cycles: range, model: PlantModel
) -> tuple[range, tuple[str, ...]]:
    """The latest cycles that one revision ran, over outages but not over cycles that others ran."""
    found = stretches_of(database, unit_id, cycles, model.digest)
    notes: tuple[str, ...] = ()
    if not any(item.own for item in found):
        newest = next(series.readings(database, unit_id, cycles.stop - 1, cycles.stop - 1)).revision_id
        digest = next(item.digest for item in revisions_of(database, unit_id) if item.id == newest)
        found = stretches_of(database, unit_id, cycles, digest)
        notes = (
            "this model file has not run in this period: its readings are those of the revision that ran last "
            f"({digest[:12]}), in the order of its tags",
        )
    last = max(k for k, item in enumerate(found) if item.own)
    first = last
    while first > 0 and found[first - 1].own:
        first -= 1
    others = [*found[:first], *found[last + 1 :]]
    if others:
        count = sum(len(item.cycles) for item in others)
        notes += (f"{count} cycles left out: other revisions of the model ran them",)
    return range(found[first].cycles.start, found[last].cycles.stop), notes


def on_the_grid(parts: Sequence[CycleReadings], step: int) -> tuple[CycleReadings, tuple[str, ...]]:
    """Recorded cycles with those that are not on record put in, and a note on these: readings missing, inputs held as too
    old.

    :param step: the sample time in microseconds.
    :raises ReplayError: cycles that are not on one sample grid, or of which most are not on record.
    """
    known = join_readings(parts)
    rows, beside = np.divmod(known.times - known.times[0], step)
    if np.any(beside != 0) or np.any(np.diff(rows) < 1):
        at = int(known.times[int(np.argmax((beside != 0) | (np.diff(rows, prepend=-1) < 1)))])
        raise ReplayError(
            f"the cycle at {time_words(at)} is not a whole number of sample times ({step * 1e-6:g} s) after the first; "
            "expected a period (--from, --to) of one sample time"
        )
    count = int(rows[-1]) + 1
    if count == len(rows):
        return known, ()
    if count > 2 * len(rows):
        raise ReplayError(
            f"of {count} cycles from {time_words(int(known.times[0]))} to {time_words(int(known.times[-1]))} only "
            f"{len(rows)} are on record; expected a period (--from, --to) of which more than half is"
        )
    there = np.zeros(count, dtype=np.bool_)
    there[rows] = True
    newest = np.cumsum(there) - 1
    u, u_quality = known.u[newest], known.u_quality[newest]
    u_quality[~there] = np.where(np.isfinite(u[~there]), CycleQuality.STALE, CycleQuality.MISSING)
    y, y_quality = known.y[newest], known.y_quality[newest]
    y[~there], y_quality[~there] = np.nan, CycleQuality.MISSING
    times = known.times[0] + step * np.arange(count, dtype=np.int64)
    note = f"{count - len(rows)} cycles are not on record (service stopped); their readings are missing"
    return CycleReadings(times, u, u_quality, y, y_quality), (note,)


def _put_in_place(readings: CycleReadings, late: Iterable[LateReadings]) -> None:
    """What past cycles came to see: readings that came late, in the cycles they belong to."""
    step = int(readings.times[1] - readings.times[0]) if len(readings) > 1 else 1
    for item in late:
        values, qualities = (
            (readings.u, readings.u_quality) if item.kind == "input" else (readings.y, readings.y_quality)
        )
        rows = (item.times - readings.times[0]) // step
        here = (rows >= 0) & (rows < len(readings))
        values[rows[here], item.column] = item.values[here]
        qualities[rows[here], item.column] = item.qualities[here]


def _spells(database: Database, unit_id: int) -> list[_Spell]:
    """Times whose readings say nothing of a sensor's noise."""
    found = [
        _Spell("it was left out of the estimate", row.tag, row.since_us, row.until_us)
        for row in decisions.left_out_of(database, unit_id)
    ]
    for flag in flags_of(database, unit_id, limit=ALL_FLAGS):
        begins = flag.onset_us if flag.onset_from_us is None else min(flag.onset_us, flag.onset_from_us)
        found += [
            _Spell("a flag was open on it or on its group", tag, begins, flag.cleared_us)
            for tag in dict.fromkeys((flag.tag, *flag.group))
        ]
    found += [
        _Spell("the tests rested", rest.tag, rest.since_us, rest.until_us)
        for rest in rests_of(database, unit_id)
    ]
    return found


def _leave_out(readings: CycleReadings, spells: Sequence[_Spell], tags: Sequence[str]) -> tuple[str, ...]:
    """Make these readings missing, and say how many of each sensor and why; a reading counts at its first reason."""
    notes = []
    for i, tag in enumerate(tags):
        counts: dict[str, int] = {}
        for spell in spells:
            if spell.tag in (tag, ""):
                hit = spell.covers(readings.times) & np.isfinite(readings.y[:, i])
                readings.y[hit, i] = np.nan
                readings.y_quality[hit, i] = CycleQuality.MISSING
                counts[spell.why] = counts.get(spell.why, 0) + int(hit.sum())
        notes += [f"{tag}: {count} readings left out: {why}" for why, count in counts.items() if count]
    return tuple(notes)


def _laboratory(
    came: Sequence[Came], first_time: int, spells: Sequence[_Spell]
) -> tuple[tuple[LabArrival, ...], tuple[str, ...]]:
    """Laboratory results in the order of arrival: those sampled within the cycles, and not while all tests rested. One
    that a person has since decided to use is there once, as decided.
    """
    newest = {
        (item.estimate, item.sampled, item.reported, item.value): item
        for item in came
        if isinstance(item, LabArrival) and item.sampled >= first_time
    }
    resting = [spell for spell in spells if not spell.tag]
    labs = sorted(newest.values(), key=lambda item: item.arrived)
    kept = tuple(
        item for item in labs if not any(spell.covers(np.array([item.sampled]))[0] for spell in resting)
    )
    count = len(labs) - len(kept)
    note = f"{count} laboratory results left out: sampled while the tests rested"
    return kept, (note,) if count else ()
