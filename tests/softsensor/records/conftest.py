"""A unit with a revision, readings and results to put on record."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest

from softsensor.readings_of_cycle import CycleReadings
from softsensor.records.blocks import ReadingsBlock, ResultsBlock
from softsensor.records.engine import Database
from softsensor.records.plant import Deed, Revision, register_revision, register_unit

NOW = 1_796_083_200_000_000
STEP = 10_000_000


@dataclass(frozen=True)
class Plant:
    """A unit on record; readings and results of it, different in each cycle, with nan and -0.0."""

    unit: int
    revision: int

    def readings(self, first: int, count: int, revision: int | None = None) -> ReadingsBlock:
        n = np.arange(first, first + count)
        u = np.stack([n * 0.1, -0.0 * n], axis=1)
        y = np.stack([np.sin(n), np.where(n % 2, np.nan, -0.0), n / 3.0], axis=1)
        codes = np.ascontiguousarray(np.stack([n % 3, n % 5, n * 0], axis=1).astype(np.int8))
        readings = CycleReadings(NOW + n * STEP, u, np.ascontiguousarray(codes[:, :2]), y, codes)
        decisions = tuple(f"decided {i}".encode() for i in n)
        return ReadingsBlock(revision or self.revision, first, readings, decisions)

    def results(self, first: int, count: int, twist: int = 0) -> ResultsBlock:
        n = np.arange(first, first + count, dtype=np.float64)
        one, three = n[:, None] + 0.25, np.stack([n, -n * 0.0, n * np.nan], axis=1)
        return ResultsBlock(
            first_cycle=first,
            estimate=one,
            sd=one * 0.1,
            status=np.ones((count, 1), dtype=np.int8),
            predicted=three,
            innovation=-three,
            innovation_sd=three + 1.0,
            used=np.ones((count, 3), dtype=np.int8),
            sums=np.repeat(three, 2, axis=1),
            reasons=tuple(f"reason {i}" for i in range(first, first + count)),
            digests=tuple(bytes([i % 256, twist]) * 16 for i in range(first, first + count)),
        )


@pytest.fixture
def put_plant() -> Callable[[Database], Plant]:
    """Puts a unit with a revision on record."""

    def put(database: Database) -> Plant:
        with database.write() as connection:
            unit = register_unit(connection, "R-210", "Jacketed stirred-tank reactor", NOW)
            revision = register_revision(
                connection, unit, Revision("ab" * 32, "[unit]\n", b"\x00\x01"), Deed("someone", "first", NOW)
            )
        return Plant(unit, revision)

    return put


@pytest.fixture
def plant(database: Database, put_plant: Callable[[Database], Plant]) -> Plant:
    """A unit with a revision in the database of each kind in turn."""
    return put_plant(database)
