"""One unit in service: readings in, cycles on the grid, everything on record, news to whoever is looking."""

from __future__ import annotations

import asyncio
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from connectors.readings import Quality, Reading
from plant_models.plant_model import PlantModel
from softsensor.cycle import UnitDesign
from softsensor.detection.people import ACTS, Decision
from softsensor.estimation.kernel import CHUNK
from softsensor.estimation.lab_results import LabArrival
from softsensor.estimation.late_readings import LateReadings
from softsensor.readings_of_cycle import CycleReadings
from softsensor.records import blocks, storing
from softsensor.records.decisions import begin_anew, waiting_decisions
from softsensor.records.engine import Database
from softsensor.records.reader import StoredLab, lab_results_of
from softsensor.records.writer import RecordsWriter, WriterState
from softsensor.service.assembly import LiveAssembly
from softsensor.service.checkpoints import FORMAT, Context, pack_state
from softsensor.service.held_values import held_values
from softsensor.service.plant_state import PlantStates, StateRule
from softsensor.service.recording import Step, pack_decisions, write_step
from softsensor.service.replay import horizon_cycles
from softsensor.service.resuming import LastSeen, fresh_run, last_seen, recorded_cycles, resumed_run
from softsensor.service.sample_grid import first_cycle_time
from softsensor.service.unit_run import Came, slice_readings

COMMIT_PATIENCE = 2.0
"""Seconds a cycle waits for its readings to be on record before it goes on with them queued."""


@dataclass(frozen=True)
class UnitIdentity:
    """Where a unit's records go."""

    unit_id: int
    revision_id: int
    holder: str | None = None
    """Our name in the unit's claim (``records.claims``); None where nobody else can write to the records."""


class UnitService:
    """A unit under way. Feed it readings with :meth:`accept`; run each cycle, in order, with :meth:`run_cycle`."""

    def __init__(
        self,
        design: UnitDesign,
        identity: UnitIdentity,
        database: Database,
        writer: RecordsWriter,
        states: Sequence[StateRule] = (),
    ) -> None:
        self.design = design
        self.identity = identity
        self._database = database
        self._writer = writer
        self._sample_us = design.detection.sample_us
        self._lab_index = {
            item.lab.tag: e for e, item in enumerate(design.model.spec.estimates) if item.lab is not None
        }
        self._latest_labs: dict[tuple[str, int], LabArrival] = {}
        self._pending_labs: list[LabArrival] = []
        self._decided_labs: set[tuple[str, int, int, float]] = set()
        self._pending_decisions: list[Decision] = []
        self._seen_decisions: set[int] = set()
        self._horizon = horizon_cycles(design.model.spec)
        self._assembly = LiveAssembly(design.model.spec)
        self._states = PlantStates(states)
        self.run = fresh_run(design, self._horizon)
        self.next_time: int | None = None
        self._not_before = 0
        self.records_late = False

    @property
    def name(self) -> str:
        """The unit's name."""
        return self.design.model.spec.name

    @property
    def model(self) -> PlantModel:
        """The revision that runs."""
        return self.design.model

    def accept(self, reading: Reading, now: int) -> None:
        """Take a reading, or a laboratory result: its source timestamp is its sampling time.

        Another value with the same source timestamp is a correction.
        """
        self._states.accept(reading)
        index = self._lab_index.get(reading.tag)
        if index is None:
            self._assembly.accept(reading)
            return
        known = self._latest_labs.get((reading.tag, reading.time))
        if reading.quality is Quality.BAD or not np.isfinite(reading.value):
            return
        if known is not None and known.value == reading.value:
            return
        reported = max(now, reading.time)
        if known is not None:
            reported = max(reported, known.reported + 1)
        arrival = LabArrival(index, reading.tag, reading.time, reported, reading.value)
        self._know(arrival)
        self._pending_labs.append(arrival)

    def _know(self, arrival: LabArrival) -> None:
        """The newest report of a sample tells whether what comes next is news."""
        before = self._latest_labs.get((arrival.tag, arrival.sampled))
        if before is None or before.reported <= arrival.reported:
            self._latest_labs[arrival.tag, arrival.sampled] = arrival

    def drives_clock(self, tag: str) -> bool:
        """Is a tag's timestamp the time it was measured at? A laboratory result's lies far back."""
        return tag not in self._lab_index

    def coming_cycle(self, now: int) -> int:
        """Time of the coming cycle; for a run that begins now, the first one on the grid."""
        if self.next_time is None:
            self.next_time = max(first_cycle_time(now, self._sample_us), self._not_before)
        return self.next_time

    def decided_labs(self) -> list[tuple[int, LabArrival]]:
        """Results that were left out and that a person has since decided to use, with their place in the records."""
        return [
            (row.id, self._arrival(row))
            for row in lab_results_of(self._database, self.identity.unit_id)
            if row.decided_by is not None and row.status == "used" and row.counted_cycle is None
        ]

    def _arrival(self, row: StoredLab) -> LabArrival:
        index = self._lab_index[row.tag]
        return LabArrival(index, row.tag, row.sampled_us, row.reported_us, row.value, row.time_uncertainty)

    def decide(self, arrival: LabArrival, now: int) -> None:
        """A result that a person has decided to use arrives once more, and once only."""
        if _key(arrival) not in self._decided_labs:
            self._decided_labs.add(_key(arrival))
            self._pending_labs.append(replace(arrival, decided_at=now))

    def waiting_decisions(self) -> list[Decision]:
        """What people have decided about sensors and tests and no cycle has taken, as far as the records know."""
        return [
            Decision(
                row.id,
                next(act for act in ACTS if act == row.act),
                row.tag or "",
                row.flag_id or "",
                row.occasion or "",
                row.seconds or 0.0,
                row.actor,
                row.reason,
            )
            for row in waiting_decisions(self._database, self.identity.unit_id)
        ]

    def take(self, decision: Decision) -> None:
        """A person's decision takes effect at the coming cycle, and once only."""
        if decision.number not in self._seen_decisions:
            self._seen_decisions.add(decision.number)
            self._pending_decisions.append(decision)

    def complete_to(self) -> int:
        """Time up to which every tag has been heard."""
        return self._assembly.complete_to()

    async def run_cycle(self, time: int) -> Step | None:
        """Run the cycle at ``time``; None while an input has never had a value."""
        readings = self._assembly.readings_at(time)
        self.next_time = time + self._sample_us
        if not self.run.started:
            if not np.all(np.isfinite(readings.u)):
                return None
            self._keep_first_state(time)
        arrivals = [lab for lab in self._pending_labs if lab.arrived <= time]
        self._pending_labs = [lab for lab in self._pending_labs if lab.arrived > time]
        came: list[Came] = [
            *arrivals,
            *self._pending_decisions,
            *self._states.changes_at(time),
            *self._late_readings(),
        ]
        self._pending_decisions = []
        await self._store_readings(readings, came)
        step = self._advance(readings, came)
        self._submit(step)
        return step

    def _late_readings(self) -> Iterator[Came]:
        """What has come too late for its own cycle, as far as it changes what the past has seen."""
        for item in self._assembly.late:
            news = self.run.news_in(item) if isinstance(item, LateReadings) else item
            if len(news.times):
                yield news

    def _keep_first_state(self, time: int) -> None:
        cycle = self.run.state.next_cycle
        context = Context(self.model.digest, time - cycle * self._sample_us, cycle)
        checkpoint = blocks.Checkpoint(cycle, FORMAT, pack_state(self.run.state, context))
        self._writer.submit(storing.store_checkpoint, self.identity.unit_id, checkpoint)

    async def _store_readings(self, readings: CycleReadings, came: list[Came]) -> None:
        """Before the cycle runs its readings are on record, or queued for it where the database is away."""
        block = blocks.ReadingsBlock(
            self.identity.revision_id,
            self.run.state.next_cycle,
            readings,
            (pack_decisions(came),),
        )
        future = self._writer.submit(
            storing.store_readings, self.identity.unit_id, block, self.identity.holder
        )
        patience = 0.0 if self._writer.state is WriterState.WAITING else COMMIT_PATIENCE
        written = asyncio.wrap_future(future)
        written.add_done_callback(_take_note)
        done, _ = await asyncio.wait([written], timeout=patience)
        self.records_late = not done
        for item in done:
            item.result()

    def _advance(self, readings: CycleReadings, came: list[Came]) -> Step:
        before = self.run.state.book.exclusions
        advance = self.run.advance(readings, came)
        after = self.run.state.book.exclusions
        keep = self.run.state.next_cycle % CHUNK == 0 or bool(advance.revisions)
        return Step(
            readings,
            advance.results[-1],
            bytes.fromhex(self.run.state.digest.hexdigest()),
            advance.labs,
            advance.revisions,
            self._checkpoint() if keep else None,
            advance.taken,
            after if after != before else (),
        )

    def _checkpoint(self) -> bytes:
        assert self.run.first_time is not None
        remembered = self.run.past.first_cycle
        context = Context(self.model.digest, self.run.first_time, remembered, self.run.labs)
        return pack_state(self.run.state, context)

    def _submit(self, step: Step) -> None:
        self._writer.submit(write_step, self.identity.unit_id, self.design, step)
        if step.checkpoint is not None:
            oldest = step.results.first - self._horizon - 2 * CHUNK
            self._writer.submit(storing.drop_checkpoints, self.identity.unit_id, oldest)

    def resume(self) -> int:
        """Go on from the records, if there are any; returns how many recorded cycles ran again.

        Cycles between the last one on record and now are run by the caller, one after the other, without readings.
        """
        unit_id = self.identity.unit_id
        seen = last_seen(self._database, unit_id)
        self.run = resumed_run(self.design, self._database, unit_id, self._horizon)
        if seen is None:
            return 0
        for row in lab_results_of(self._database, unit_id):
            if row.tag in self._lab_index:
                self._know(self._arrival(row))
        if not self.run.started:
            again_from = int(seen.readings.times[-1]) + self._sample_us
            self._writer.submit(begin_anew, unit_id, again_from)
        first, again = self.run.state.next_cycle, 0
        for part, came in recorded_cycles(self._database, unit_id, first, seen.cycle):
            self._remember(came)
            for k in range(len(part)):
                self._submit(self._advance(slice_readings(part, k, k + 1), came if k == 0 else []))
                again += 1
        self._hold(seen)
        return again

    def _remember(self, came: list[Came]) -> None:
        """What the plant's server or the records show again after a restart has come already.

        What came before cycles that ran again may not be settled on record yet.
        """
        self._seen_decisions |= {item.number for item in came if isinstance(item, Decision)}
        arrivals = [item for item in came if isinstance(item, LabArrival)]
        for arrival in arrivals:
            self._know(arrival)
        self._decided_labs |= {_key(arrival) for arrival in arrivals if arrival.decided_at is not None}

    def _hold(self, seen: LastSeen) -> None:
        """Inputs go on from the last recorded cycle's values; a run that is fresh starts when it can."""
        last = int(seen.readings.times[-1])
        self._not_before = last + self._sample_us
        if not self.run.started:
            return
        self.next_time = last + self._sample_us
        self._assembly = LiveAssembly(self.model.spec, held_values(self.model.spec, seen.readings))
        self._states.resume(self.run.state.book.held(self.model.sensor_tags), last)


def _take_note(written: asyncio.Future[None]) -> None:
    """A write that fails after its cycle went on is told by the writer; here its error only counts as seen."""
    if not written.cancelled():
        written.exception()


def _key(arrival: LabArrival) -> tuple[str, int, int, float]:
    return arrival.tag, arrival.sampled, arrival.reported, arrival.value
