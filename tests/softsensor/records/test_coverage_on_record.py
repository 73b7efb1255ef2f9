"""A change of coverage is an event once, on both databases, however often the cycle is written."""

from __future__ import annotations

from typing import Any

from softsensor.records import happenings, reader
from softsensor.records.coverage import watch_coverage
from softsensor.records.engine import Database
from softsensor.records.storing import store_readings

NOW, STEP = 1_796_083_200_000_000, 10_000_000


def put(database: Database, plant: Any, cycle: int, innovation: float) -> None:
    """A result that arrives at a cycle, and the look at its tag; written twice, as after an interruption."""
    for _ in range(2):
        with database.write() as connection:
            result = happenings.LabResult("AL2101", NOW + cycle, NOW + cycle * STEP, 1.3)
            lab = happenings.store_lab(connection, plant.unit, result)
            used = happenings.LabOutcome("used", "", cycle, cycle, 1.3, innovation, 1.0)
            happenings.settle_lab(connection, lab, used)
            watch_coverage(connection, plant.unit, "AL2101", 1, NOW + cycle * STEP)


def told(database: Database) -> list[str]:
    return [item.event.text for item in reader.events_since(database) if item.event.kind == "coverage"]


def test_four_results_outside_in_a_row_are_told_once(database: Database, plant: Any) -> None:
    with database.write() as connection:
        store_readings(connection, plant.unit, plant.readings(0, 40))
    for cycle in range(20):
        put(database, plant, cycle, 1.95 if cycle % 2 else -1.9)
    for cycle in range(20, 23):
        put(database, plant, cycle, 1.97)
    assert told(database) == []
    for cycle in range(23, 26):
        put(database, plant, cycle, -4.0)
    (text,) = told(database)
    assert text.startswith(
        "4 of the last 24 results of AL2101 lay outside the 95 % interval, where 1.2 are expected"
    )
    assert "once in 1284 results" in text
