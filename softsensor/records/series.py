"""The cycles on record, as arrays: readings as used, results as published, and what goes with them."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Row, Select, func, select

from softsensor.readings_of_cycle import CycleReadings
from softsensor.records.blocks import (
    CODE_FIELDS,
    FLOAT_FIELDS,
    Checkpoint,
    ReadingsBlock,
    ResultsBlock,
    RevisedEstimates,
    Rollup,
)
from softsensor.records.engine import Database
from softsensor.records.tables import checkpoints, cycles, results, revised_estimates, rollups
from softsensor.records.vectors import stack, stack_codes

Times = NDArray[np.int64]
BLOCK = 10_000
"""Rows to a block at most."""


@dataclass(frozen=True)
class TimedResults:
    """Results of consecutive cycles with their times (N,) in UTC microseconds, all under one revision."""

    revision_id: int
    times: Times
    results: ResultsBlock


def cycles_between(database: Database, unit_id: int, from_us: int, to_us: int) -> range:
    """From the first to the last cycle on record at ``from_us <= time < to_us``; empty where there is none.

    Cycle numbers grow with time; a number in the range may be missing on record.
    """
    inside = select(cycles.c.cycle).where(
        cycles.c.unit_id == unit_id, cycles.c.time_us >= from_us, cycles.c.time_us < to_us
    )
    with database.read() as connection:
        first = connection.execute(inside.order_by(cycles.c.time_us).limit(1)).scalar_one_or_none()
        last = connection.execute(inside.order_by(cycles.c.time_us.desc()).limit(1)).scalar_one_or_none()
    return range(0) if first is None or last is None else range(first, last + 1)


def latest_cycle(database: Database, unit_id: int) -> int | None:
    """The number of the newest cycle whose readings are on record; None before the first."""
    query = select(cycles.c.cycle).where(cycles.c.unit_id == unit_id).order_by(cycles.c.cycle.desc())
    with database.read() as connection:
        newest: int | None = connection.execute(query.limit(1)).scalar_one_or_none()
    return newest


def revisions_between(database: Database, unit_id: int, first: int, last: int) -> list[int]:
    """The revisions that ran cycles ``first`` to ``last``, both included, by id; the one that ran last is the last."""
    query = (
        select(cycles.c.revision_id)
        .where(cycles.c.unit_id == unit_id, cycles.c.cycle >= first, cycles.c.cycle <= last)
        .group_by(cycles.c.revision_id)
        .order_by(func.max(cycles.c.cycle))
    )
    with database.read() as connection:
        return [int(found) for found in connection.execute(query).scalars()]


def decided(database: Database, unit_id: int, first: int, last: int) -> list[bytes]:
    """What was decided before cycles ``first`` to ``last``, both included, in their order, where anything was."""
    query = (
        select(cycles.c.decisions)
        .where(cycles.c.unit_id == unit_id, cycles.c.cycle >= first, cycles.c.cycle <= last)
        .where(cycles.c.decisions != b"")
        .order_by(cycles.c.cycle)
    )
    with database.read() as connection:
        return [bytes(found) for found in connection.execute(query).scalars()]


def readings(database: Database, unit_id: int, first: int, last: int) -> Iterator[ReadingsBlock]:
    """The readings of cycles ``first`` to ``last``, both included, as they were used, in blocks.

    A block ends where the revision of the model changes, where cycles are not on record, and after 10,000
    cycles.
    """
    columns = [cycles.c[name] for name in cycles.columns.keys() if name != "unit_id"]  # noqa: SIM118
    query = select(*columns).where(cycles.c.unit_id == unit_id)
    for rows in _runs(database, query, cycles.c.cycle, first, last):
        yield ReadingsBlock(
            rows[0].revision_id,
            rows[0].cycle,
            CycleReadings(
                np.array([row.time_us for row in rows], dtype=np.int64),
                stack([row.u for row in rows]),
                stack_codes([row.u_quality for row in rows]),
                stack([row.y for row in rows]),
                stack_codes([row.y_quality for row in rows]),
            ),
            tuple(row.decisions for row in rows),
        )


def published(database: Database, unit_id: int, first: int, last: int) -> Iterator[TimedResults]:
    """The results of cycles ``first`` to ``last``, both included, as published, in blocks like readings."""
    columns = [results.c[name] for name in results.columns.keys() if name != "unit_id"]  # noqa: SIM118
    query = (
        select(*columns, cycles.c.time_us, cycles.c.revision_id)
        .join(cycles, (cycles.c.unit_id == results.c.unit_id) & (cycles.c.cycle == results.c.cycle))
        .where(results.c.unit_id == unit_id)
    )
    for rows in _runs(database, query, results.c.cycle, first, last):
        yield TimedResults(
            rows[0].revision_id, np.array([row.time_us for row in rows], dtype=np.int64), _results(rows)
        )


def latest_results(database: Database, unit_id: int) -> TimedResults | None:
    """The newest cycle's results, N = 1; None before the first."""
    query = select(results.c.cycle).where(results.c.unit_id == unit_id).order_by(results.c.cycle.desc())
    with database.read() as connection:
        newest = connection.execute(query.limit(1)).scalar_one_or_none()
    if newest is None:
        return None
    return next(published(database, unit_id, newest, newest), None)


def revised(database: Database, unit_id: int, first: int, last: int) -> dict[int, RevisedEstimates]:
    """The newest revised estimates of cycles ``first`` to ``last``, N = 1 each, by cycle."""
    table = revised_estimates
    query = (
        select(table)
        .where(table.c.unit_id == unit_id, table.c.cycle >= first, table.c.cycle <= last)
        .order_by(table.c.cycle, table.c.revised_at_cycle)
    )
    with database.read() as connection:
        rows = connection.execute(query).all()
    return {
        row.cycle: RevisedEstimates(row.cycle, row.revised_at_cycle, stack([row.estimate]), stack([row.sd]))
        for row in rows
    }


def last_checkpoint(database: Database, unit_id: int, at_most: int | None = None) -> Checkpoint | None:
    """The newest checkpoint, or the newest for a cycle not beyond ``at_most``; None where there is none."""
    query = select(checkpoints.c.cycle, checkpoints.c.format_version, checkpoints.c.state)
    query = query.where(checkpoints.c.unit_id == unit_id).order_by(checkpoints.c.cycle.desc()).limit(1)
    if at_most is not None:
        query = query.where(checkpoints.c.cycle <= at_most)
    with database.read() as connection:
        row = connection.execute(query).one_or_none()
    return None if row is None else Checkpoint(**row._mapping)


def rollups_between(
    database: Database, unit_id: int, width_us: int, from_us: int, to_us: int
) -> list[Rollup]:
    """The rollups of a width that start at ``from_us <= time < to_us``, by tag, quantity and time."""
    table = rollups
    columns = [table.c[name] for name in table.columns.keys() if name != "unit_id"]  # noqa: SIM118
    query = (
        select(*columns)
        .where(table.c.unit_id == unit_id, table.c.width_us == width_us)
        .where(table.c.start_us >= from_us, table.c.start_us < to_us)
        .order_by(table.c.tag, table.c.quantity, table.c.start_us)
    )
    with database.read() as connection:
        rows = connection.execute(query).all()
    return [Rollup(**row._mapping) for row in rows]


def _runs(
    database: Database, query: Select[Any], cycle: Any, first: int, last: int
) -> Iterator[Sequence[Row[Any]]]:
    """Rows of consecutive cycles under one revision; a transaction for each block, none between blocks."""
    while first <= last:
        with database.read() as connection:
            chosen = query.where(cycle >= first, cycle <= last).order_by(cycle).limit(BLOCK)
            rows = connection.execute(chosen).all()
        start = 0
        for i in range(1, len(rows) + 1):
            ends = i == len(rows) or (
                rows[i].cycle != rows[i - 1].cycle + 1 or rows[i].revision_id != rows[i - 1].revision_id
            )
            if ends:
                yield rows[start:i]
                start = i
        if not rows:
            return
        first = rows[-1].cycle + 1


def _results(rows: Sequence[Row[Any]]) -> ResultsBlock:
    vectors: dict[str, Any] = {name: stack([row._mapping[name] for row in rows]) for name in FLOAT_FIELDS}
    vectors |= {name: stack_codes([row._mapping[name] for row in rows]) for name in CODE_FIELDS}
    return ResultsBlock(
        first_cycle=rows[0].cycle,
        reasons=tuple(row.reasons for row in rows),
        digests=tuple(row.digest for row in rows),
        **vectors,
    )
