"""A past period on record, smoothed: for review, from the records alone.

From the newest state on record at or before the period's first cycle that everything learnt since has been worked into,
the filter runs forward over the recorded cycles and the smoother backward. Readings that came late, laboratory results and
left-out sensors are taken as they are known now. Readings from after the period count too, for as long again as the period
lasts or up to the newest cycle.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from softsensor.cycle import LabAtCycle, UnitDesign, start
from softsensor.detection.flags import Exclusion, FlagBook
from softsensor.errors import RecordsError
from softsensor.estimation.kernel import CHUNK, EstimatorState
from softsensor.estimation.late_readings import LateReadings
from softsensor.estimation.smoothing import SmoothedCycles
from softsensor.readings_of_cycle import CycleReadings, join_readings
from softsensor.records import series
from softsensor.records.blocks import Checkpoint
from softsensor.records.decisions import left_out_of
from softsensor.records.engine import Database
from softsensor.records.reader import lab_results_of
from softsensor.service.checkpoints import FORMAT, unpack_estimator
from softsensor.service.recording import unpack_decisions
from softsensor.service.replay import horizon_cycles
from softsensor.service.smoothed_run import Known, Smoother

LONGEST = 200_000
"""Cycles of a period at most, and cycles before it at most that are run where no state is on record."""

NEWEST = "the newest cycle"
AS_LONG = "as many cycles after the period as it has itself"
END_OF_RUN = "the last cycle of the run"

DesignOf = Callable[[int], UnitDesign]
"""The design of a revision by its id."""


@dataclass(frozen=True)
class SmoothedWindow:
    """A period's smoothed cycles, none where that is not possible; what they were given; what is to be said about it.

    :param revision_id: the revision whose cycles these are.
    :param given_to: time of the last cycle whose readings were given, and what that one is.
    :param known_at: time of the newest cycle: what had been learnt by then counts.
    """

    revision_id: int
    cycles: SmoothedCycles
    given_to: tuple[int, str]
    known_at: int
    remarks: tuple[str, ...]


@dataclass(frozen=True)
class _Stretch:
    """Consecutive cycles on record under one revision, one sample time apart."""

    revision_id: int
    first: int
    readings: CycleReadings

    @property
    def stop(self) -> int:
        return self.first + len(self.readings)


def smoothed_window(
    database: Database, unit_id: int, in_service: int, cycles: range, design_of: DesignOf
) -> SmoothedWindow | None:
    """The recorded cycles ``cycles`` smoothed, under the revision in service, or where it has none of them under the
    revision that ran last in them; None where none of them is on record with its results.

    :param in_service: the id of the revision in service.
    :raises RecordsError: the period is too long, or a state on record is damaged.
    """
    if len(cycles) > LONGEST:
        raise RecordsError(f"the period has {len(cycles)} cycles; expected {LONGEST} at most")
    newest = series.latest_results(database, unit_id)
    runs = series.revisions_between(database, unit_id, cycles.start, cycles.stop - 1)
    if newest is None or not runs:
        return None
    last, known_at = newest.results.first_cycle, int(newest.times[-1])
    cycles = range(cycles.start, min(cycles.stop, last + 1))
    chosen = in_service if in_service in runs else runs[-1]
    state = _state_before(database, unit_id, cycles.start)
    begin = max(cycles.start - LONGEST, 0) if state is None else state.cycle
    run = range(begin, min(last + 1, cycles.stop + len(cycles)))
    stretch = _stretch_of(database, unit_id, chosen, run, cycles) if cycles else None
    if stretch is None:
        return None
    design = design_of(chosen)
    before = _estimator(design, state, stretch, begin)
    if before is None:
        nothing = np.empty((0, design.kernel.n_estimates))
        empty = SmoothedCycles(np.empty(0, dtype=np.int64), nothing, nothing)
        return SmoothedWindow(
            chosen, empty, (known_at, NEWEST), known_at, (_no_state(state, stretch, begin),)
        )
    labs, remarks = _labs(database, unit_id, design, stretch)
    book, late = _book(database, unit_id, design, stretch), _late(database, unit_id, design, stretch)
    found = _smoothed(design, stretch, Known(before, stretch.first, labs, book, late), cycles)
    remarks = [*_part_only(stretch, cycles), *remarks]
    if chosen != in_service:
        remarks.insert(
            0, "smoothed with the revision of the model that ran then, not with the one in service now"
        )
    what = NEWEST if stretch.stop > last else AS_LONG if stretch.stop == run.stop else END_OF_RUN
    given_to = (int(stretch.readings.times[-1]), what)
    return SmoothedWindow(chosen, found, given_to, known_at, tuple(remarks))


def _smoothed(design: UnitDesign, stretch: _Stretch, known: Known, cycles: range) -> SmoothedCycles:
    """Those of the stretch's cycles that are among ``cycles``."""
    with Smoother(design) as smoother:
        smoother.keep(stretch.readings)
        parts = list(smoother.cycles(known))
    rows = slice(max(cycles.start - stretch.first, 0), max(cycles.stop - stretch.first, 0))
    return SmoothedCycles(
        np.concatenate([part.times for part in parts])[rows],
        np.concatenate([part.estimate for part in parts])[rows],
        np.concatenate([part.sd for part in parts])[rows],
    )


def _part_only(stretch: _Stretch, cycles: range) -> list[str]:
    if stretch.first <= cycles.start and stretch.stop >= cycles.stop:
        return []
    return [
        "only a part of the period is smoothed: its other cycles ran under another revision of the model, or before the run "
        "began anew"
    ]


def _state_before(database: Database, unit_id: int, cycle: int) -> Checkpoint | None:
    """The newest state at or before a cycle that goes back and forward again for late results have kept up to date: only
    those before every CHUNK-th cycle are. None where that one is of another release's format, or none is on record.
    """
    found = series.last_checkpoint(database, unit_id, cycle)
    while found is not None and found.cycle % CHUNK:
        found = series.last_checkpoint(database, unit_id, found.cycle // CHUNK * CHUNK)
    return found if found is not None and found.format_version == FORMAT else None


def _no_state(state: Checkpoint | None, stretch: _Stretch, begin: int) -> str:
    """Why there is no smoothed estimate."""
    if state is not None and state.cycle == stretch.first:
        return "not smoothed: the state on record does not suit the model as this release makes it"
    if stretch.first > begin:
        return "not smoothed: cycles before this period are missing on record, and no state from after them is there"
    return (
        "not smoothed: no state that this release reads is on record from before this period, and the run began more than "
        f"{LONGEST} cycles earlier"
    )


def _stretch_of(
    database: Database, unit_id: int, revision_id: int, run: range, cycles: range
) -> _Stretch | None:
    """Of the cycles ``run`` the latest uninterrupted ones of the revision with any of ``cycles`` among them."""
    found: list[_Stretch] = []
    for block in series.readings(database, unit_id, run.start, run.stop - 1):
        new = _Stretch(block.revision_id, block.first_cycle, block.readings)
        if found and found[-1].stop == new.first and found[-1].revision_id == new.revision_id:
            before = found.pop()
            new = _Stretch(new.revision_id, before.first, join_readings([before.readings, new.readings]))
        found.append(new)
    for item in reversed(found):
        if item.revision_id == revision_id and item.first < cycles.stop and item.stop > cycles.start:
            return item
    return None


def _estimator(
    design: UnitDesign, state: Checkpoint | None, stretch: _Stretch, begin: int
) -> EstimatorState | None:
    """The state before a stretch: from the records, or at the beginning of a run the model's own; None where neither is
    known.
    """
    own = start(design, stretch.first).estimator
    if state is not None and state.cycle == stretch.first:
        kept = unpack_estimator(state.state, state.format_version)
        fits = all(part.shape == other.shape for part, other in zip(kept, own, strict=True))
        return kept if fits else None
    begins_here = stretch.first > begin or stretch.first == 0
    return own if begins_here and stretch.first % CHUNK == 0 else None


def _labs(
    database: Database, unit_id: int, design: UnitDesign, stretch: _Stretch
) -> tuple[tuple[LabAtCycle, ...], list[str]]:
    """Laboratory results that count within the stretch, in order of cycle, and what is to be said about them."""
    estimates, times = design.model.scaled.estimates, stretch.readings.times
    index = {item.lab.tag: e for e, item in enumerate(estimates) if item.lab is not None}
    found, doubtful = [], 0
    since = int(times[0]) - design.detection.sample_us
    for row in lab_results_of(database, unit_id, since, int(times[-1]) + 1):
        if row.status != "used" or row.counted_cycle is None or row.tag not in index:
            continue
        if not stretch.first <= row.counted_cycle < stretch.stop:
            continue
        e = index[row.tag]
        lab = estimates[e].lab
        assert lab is not None
        doubtful += row.time_uncertainty > 0.0
        found.append(LabAtCycle(row.counted_cycle, e, row.value, lab.sd**2, row.sampled_us, row.reported_us))
    text = f"{doubtful} laboratory results of uncertain sampling time count here with the laboratory's own sd"
    found.sort(key=lambda lab: (lab.cycle, lab.estimate, lab.value, lab.variance))
    return tuple(found), [text] if doubtful else []


def _book(database: Database, unit_id: int, design: UnitDesign, stretch: _Stretch) -> FlagBook:
    """Which sensors were left out, and when, in cycles of the stretch."""
    sensors = {tag: i for i, tag in enumerate(design.model.sensor_tags)}
    origin, sample_us = int(stretch.readings.times[0]), design.detection.sample_us

    def cycle_at(time_us: int) -> int:
        return stretch.first + -((origin - time_us) // sample_us)

    return FlagBook(
        exclusions=tuple(
            Exclusion(
                sensors[row.tag],
                cycle_at(row.since_us),
                None if row.until_us is None else cycle_at(row.until_us),
                row.by_person,
            )
            for row in left_out_of(database, unit_id)
            if row.tag in sensors
        )
    )


def _late(
    database: Database, unit_id: int, design: UnitDesign, stretch: _Stretch
) -> tuple[LateReadings, ...]:
    """What came late for the stretch's cycles, in the order in which it was learnt; nothing older than a run remembers."""
    remembered = horizon_cycles(design.model.spec) + 2 * CHUNK
    found = series.decided(database, unit_id, stretch.first, stretch.stop + remembered)
    return tuple(item for blob in found for item in unpack_decisions(blob) if isinstance(item, LateReadings))
