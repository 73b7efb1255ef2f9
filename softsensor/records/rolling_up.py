"""Minimum, mean and maximum over stretches of time: a year of cycles cannot be read one by one for a picture."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, Row, Select, select

from softsensor.errors import RecordsError
from softsensor.records.blocks import Rollup
from softsensor.records.storing import store_rollups
from softsensor.records.tables import cycles, results
from softsensor.records.vectors import unpack

Series = NDArray[np.float64]
Times = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class UnitTags:
    """The tags of one revision of a unit's model, in the order of its vectors."""

    inputs: tuple[str, ...]
    sensors: tuple[str, ...]
    estimates: tuple[str, ...]


def rollups_of(name: tuple[str, str], width_us: int, times: Times, values: Series) -> list[Rollup]:
    """The rollups of one quantity, a stretch that holds no value left out.

    Stretches are whole multiples of ``width_us`` since 1970. nan and infinities are no values.

    :param name: tag and quantity.
    :param times: (N,) UTC microseconds, ascending; values (N,) in the unit of the tag.

    >>> rollups_of(("TI2101A", "reading"), 10, np.array([1, 9, 10]), np.array([2.0, 4.0, np.nan]))
    [Rollup(tag='TI2101A', quantity='reading', width_us=10, start_us=0, minimum=2.0, mean=3.0, maximum=4.0, count=2)]
    """
    there = np.isfinite(values)
    kept, stretch = values[there], times[there] // width_us
    if kept.size == 0:
        return []
    starts = np.flatnonzero(np.diff(stretch, prepend=stretch[0] - 1))
    counts = np.diff(starts, append=kept.size)
    lows, highs = np.minimum.reduceat(kept, starts), np.maximum.reduceat(kept, starts)
    means = np.add.reduceat(kept, starts) / counts
    return [
        Rollup(*name, width_us, int(stretch[at]) * width_us, float(low), float(mean), float(high), int(count))
        for at, low, mean, high, count in zip(starts, lows, means, highs, counts, strict=True)
    ]


def roll_up(
    connection: Connection, unit_id: int, tags: Mapping[int, UnitTags], width_us: int, span: tuple[int, int]
) -> int:
    """Put the rollups of a span of time on record, from the cycles on record; returns how many there are.

    Inputs and sensors give the quantity ``reading`` in their unit, estimates ``value`` and ``sd`` as they are on record, in
    model scale where they have a transform. May be repeated.

    :param tags: by revision; every revision that ran in the span.
    :param span: from and to in UTC microseconds, whole multiples of ``width_us``; the cycles in it are complete.
    :raises RecordsError: a span that cuts a stretch in two, or a revision without tags.
    """
    if span[0] % width_us or span[1] % width_us:
        raise RecordsError(f"rollups of {width_us} us cannot be made over {span[0]} to {span[1]}")
    collected: dict[tuple[str, str], tuple[list[int], list[float]]] = defaultdict(lambda: ([], []))
    for row in _rows(connection, unit_id, span):
        if row.revision_id not in tags:
            raise RecordsError(f"the tags of revision {row.revision_id} of unit {unit_id} are not known")
        for name, values in _named(row, tags[row.revision_id]):
            collected[name][0].append(row.time_us)
            collected[name][1].append(values)
    made = [
        rollup
        for name, (times, values) in collected.items()
        for rollup in rollups_of(name, width_us, np.array(times, dtype=np.int64), np.array(values))
    ]
    store_rollups(connection, unit_id, made)
    return len(made)


def _rows(connection: Connection, unit_id: int, span: tuple[int, int]) -> list[Row[Any]]:
    query: Select[Any] = (
        select(
            cycles.c.time_us, cycles.c.revision_id, cycles.c.u, cycles.c.y, results.c.estimate, results.c.sd
        )
        .outerjoin(results, (results.c.unit_id == cycles.c.unit_id) & (results.c.cycle == cycles.c.cycle))
        .where(cycles.c.unit_id == unit_id, cycles.c.time_us >= span[0], cycles.c.time_us < span[1])
        .order_by(cycles.c.time_us)
    )
    return list(connection.execute(query).all())


def _named(row: Row[Any], tags: UnitTags) -> list[tuple[tuple[str, str], float]]:
    """Every value of a cycle with its tag and quantity."""
    parts = [(tags.inputs, "reading", row.u), (tags.sensors, "reading", row.y)]
    if row.estimate is not None:
        parts += [(tags.estimates, "value", row.estimate), (tags.estimates, "sd", row.sd)]
    return [
        ((tag, quantity), float(value))
        for names, quantity, blob in parts
        for tag, value in zip(names, unpack(blob), strict=True)
    ]
