"""What the cycles used and gave. Each function runs in the caller's transaction and may be repeated.

After an interruption the service runs the cycles since its checkpoint again and stores them again. Readings
that are on record must then be the same, bit for bit; results that are on record stay as they were published.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

from sqlalchemy import Connection, delete, select

from softsensor.errors import RecordsError
from softsensor.records.blocks import (
    CODE_FIELDS,
    FLOAT_FIELDS,
    Checkpoint,
    ReadingsBlock,
    ResultsBlock,
    RevisedEstimates,
    Rollup,
)
from softsensor.records.claims import require_claim
from softsensor.records.happenings import Event, record_event
from softsensor.records.inserting import insert_new, insert_or_replace
from softsensor.records.tables import checkpoints, cycles, results, revised_estimates, rollups
from softsensor.records.vectors import pack

LASTING = 8192
"""The state before each of this many cycles stays on record for good: about one a day at 10 s."""


def store_readings(
    connection: Connection, unit_id: int, block: ReadingsBlock, holder: str | None = None
) -> None:
    """Put the readings of consecutive cycles on record, before the cycles run.

    :param holder: the service that claims the unit (``records.claims``); None where nobody else can write.
    :raises RecordsError: the unit is another service's by now; one of the cycles, or of their times, is on record with
        other readings.
    """
    if holder is not None:
        require_claim(connection, unit_id, holder)
    rows = [_readings_row(unit_id, block, i) for i in range(len(block))]
    if insert_new(connection, cycles, rows) == len(rows):
        return
    columns = [cycles.c[name] for name in rows[0]]
    there = {
        row.cycle: dict(row._mapping)
        for row in connection.execute(
            select(*columns)
            .where(cycles.c.unit_id == unit_id, cycles.c.cycle >= rows[0]["cycle"])
            .where(cycles.c.cycle <= rows[-1]["cycle"])
        )
    }
    for row in rows:
        if there.get(row["cycle"]) != row:
            raise RecordsError(
                f"cycle {row['cycle']} of unit {unit_id} is on record with other readings; "
                "nothing else may write a unit's cycles while its service runs"
            )


def _readings_row(unit_id: int, block: ReadingsBlock, i: int) -> dict[str, Any]:
    readings = block.readings
    return {
        "unit_id": unit_id,
        "cycle": block.first_cycle + i,
        "revision_id": block.revision_id,
        "time_us": int(readings.times[i]),
        "u": pack(readings.u[i]),
        "u_quality": pack(readings.u_quality[i]),
        "y": pack(readings.y[i]),
        "y_quality": pack(readings.y_quality[i]),
        "decisions": block.decisions[i] if block.decisions else b"",
    }


def store_results(connection: Connection, unit_id: int, block: ResultsBlock) -> None:
    """Put the results of consecutive cycles on record; their readings must be there.

    Results that are on record already stay. Where a repeated cycle's digest differs from the one on record,
    that is put on record as an event of kind ``results differ``.
    """
    rows = [_results_row(unit_id, block, i) for i in range(len(block))]
    if insert_new(connection, results, rows) == len(rows):
        return
    there = connection.execute(
        select(results.c.cycle, results.c.digest, cycles.c.time_us)
        .join(cycles, (cycles.c.unit_id == results.c.unit_id) & (cycles.c.cycle == results.c.cycle))
        .where(results.c.unit_id == unit_id, results.c.cycle >= rows[0]["cycle"])
        .where(results.c.cycle <= rows[-1]["cycle"])
        .order_by(results.c.cycle)
    )
    for row in there:
        again = block.digests[row.cycle - block.first_cycle]
        if row.digest == again:
            continue
        text = f"cycle {row.cycle} gave {again.hex()} when it ran again; {row.digest.hex()} stays on record"
        key = f"results differ {unit_id} {row.cycle} {again.hex()}"
        record_event(connection, Event(unit_id, row.time_us, "results differ", text, key=key))


def _results_row(unit_id: int, block: ResultsBlock, i: int) -> dict[str, Any]:
    row: dict[str, Any] = {"unit_id": unit_id, "cycle": block.first_cycle + i}
    for name in FLOAT_FIELDS + CODE_FIELDS:
        row[name] = pack(getattr(block, name)[i])
    return row | {"reasons": block.reasons[i], "digest": block.digests[i]}


def store_checkpoint(connection: Connection, unit_id: int, checkpoint: Checkpoint) -> None:
    """Put the state before a cycle on record; one that is there for the same cycle is replaced."""
    insert_or_replace(connection, checkpoints, [{"unit_id": unit_id} | asdict(checkpoint)])


def drop_checkpoints(connection: Connection, unit_id: int, before_cycle: int) -> None:
    """Forget the checkpoints before a cycle, once no laboratory result can reach back so far, but for one in every
    LASTING cycles: from those a period long ago can still be smoothed.
    """
    old = checkpoints.c.cycle < before_cycle
    connection.execute(
        delete(checkpoints).where(checkpoints.c.unit_id == unit_id, old, checkpoints.c.cycle % LASTING != 0)
    )


def store_revised(connection: Connection, unit_id: int, revised: RevisedEstimates) -> None:
    """Put revised estimates on record beside what was published; of several revisions in one cycle the last one stays."""
    insert_or_replace(
        connection,
        revised_estimates,
        [
            {
                "unit_id": unit_id,
                "cycle": revised.first_cycle + i,
                "revised_at_cycle": revised.revised_at_cycle,
                "estimate": pack(revised.estimate[i]),
                "sd": pack(revised.sd[i]),
            }
            for i in range(revised.estimate.shape[0])
        ],
    )


def store_rollups(connection: Connection, unit_id: int, items: Sequence[Rollup]) -> None:
    """Put rollups on record; one that is there for the same stretch is replaced, so it must be whole."""
    insert_or_replace(connection, rollups, [{"unit_id": unit_id} | asdict(item) for item in items])
