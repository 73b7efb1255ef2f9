"""A restart: from the records to a run that goes on as if it had never stopped."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass

from softsensor.cycle import UnitDesign, start
from softsensor.errors import RecordsError
from softsensor.estimation.kernel import CHUNK
from softsensor.estimation.late_readings import LateReadings
from softsensor.estimation.past import Past
from softsensor.readings_of_cycle import CycleReadings
from softsensor.records import series
from softsensor.records.engine import Database
from softsensor.service.checkpoints import FORMAT, unpack_estimator, unpack_state
from softsensor.service.recording import unpack_decisions
from softsensor.service.unit_run import Came, UnitRun, slice_readings


@dataclass(frozen=True)
class LastSeen:
    """The newest recorded cycle: its number, its readings as one row."""

    cycle: int
    readings: CycleReadings


def fresh_run(design: UnitDesign, horizon: int, first_cycle: int = 0) -> UnitRun:
    """A run that has seen nothing; its first cycle gets this number, a multiple of the checkpoint interval."""
    past = Past(horizon, design.kernel.n_estimates)
    past.next_cycle = first_cycle
    return UnitRun(design, start(design, first_cycle), past)


def last_seen(database: Database, unit_id: int) -> LastSeen | None:
    """The newest cycle on record, of whatever revision."""
    latest = series.latest_cycle(database, unit_id)
    if latest is None:
        return None
    block = next(series.readings(database, unit_id, latest, latest))
    return LastSeen(latest, block.readings)


def resumed_run(design: UnitDesign, database: Database, unit_id: int, horizon: int) -> UnitRun:
    """The run at its newest checkpoint, or a fresh one where this revision has none.

    A checkpoint of an earlier release's format is one of another revision too: what a revision's digest stands for has
    changed with the format.

    :raises RecordsError: a checkpoint of a later release, or a damaged one.
    """
    seen = last_seen(database, unit_id)
    checkpoint = series.last_checkpoint(database, unit_id)
    if checkpoint is None or checkpoint.format_version < FORMAT:
        return fresh_run(design, horizon, 0 if seen is None else _next_chunk(seen.cycle))
    state, context = unpack_state(checkpoint.state, checkpoint.format_version)
    if context.model_digest != design.model.digest:
        return fresh_run(design, horizon, 0 if seen is None else _next_chunk(seen.cycle))
    past = Past(horizon, design.kernel.n_estimates)
    refill(past, database, unit_id, range(context.first_remembered, state.next_cycle))
    run = UnitRun(design, state, past, context.labs, context.first_time)
    for _, came in recorded_cycles(database, unit_id, past.first_cycle, state.next_cycle - 1):
        run.remember_late([item for item in came if isinstance(item, LateReadings)])
    return run


def _next_chunk(cycle: int) -> int:
    return (cycle // CHUNK + 1) * CHUNK


def refill(past: Past, database: Database, unit_id: int, cycles: range) -> None:
    """What a run remembered of these cycles, from checkpoints, readings and estimates as now known.

    :param cycles: from a multiple of the checkpoint interval to the coming cycle.
    """
    for cycle in range(cycles.start, cycles.stop, CHUNK):
        _refill_chunk(past, database, unit_id, cycle, min(cycle + CHUNK, cycles.stop))
    past.next_cycle = cycles.stop


def _refill_chunk(past: Past, database: Database, unit_id: int, cycle: int, stop: int) -> None:
    checkpoint = series.last_checkpoint(database, unit_id, cycle)
    if checkpoint is None or checkpoint.cycle != cycle:
        return
    before = unpack_estimator(checkpoint.state, checkpoint.format_version)
    readings = next(series.readings(database, unit_id, cycle, stop - 1), None)
    results = next(series.published(database, unit_id, cycle, stop - 1), None)
    if (
        readings is None
        or results is None
        or len(readings) != stop - cycle
        or len(results.times) != stop - cycle
    ):
        raise RecordsError(f"cycles {cycle} to {stop - 1} of unit {unit_id} are not whole on record")
    estimate, sd = results.results.estimate.copy(), results.results.sd.copy()
    for at, item in series.revised(database, unit_id, cycle, stop - 1).items():
        estimate[at - cycle], sd[at - cycle] = item.estimate[0], item.sd[0]
    past.restore(cycle, before, readings.readings, estimate, sd)


def recorded_cycles(
    database: Database, unit_id: int, first: int, last: int
) -> Iterator[tuple[CycleReadings, list[Came]]]:
    """Recorded cycles as they ran: stretches that begin where laboratory results or people's decisions came."""
    for block in series.readings(database, unit_id, first, last):
        starts = [k for k, blob in enumerate(block.decisions) if blob]
        cuts = sorted({0, *starts, len(block)})
        for begin, end in itertools.pairwise(cuts):
            yield slice_readings(block.readings, begin, end), unpack_decisions(block.decisions[begin])
