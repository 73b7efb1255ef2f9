"""Readings, results, checkpoints and rollups: what goes in comes out, bit for bit, and counts once."""

from __future__ import annotations

from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest

from softsensor.errors import RecordsError
from softsensor.records import reader, series, storing
from softsensor.records.blocks import Checkpoint, ReadingsBlock, ResultsBlock, RevisedEstimates, Rollup
from softsensor.records.engine import Database
from softsensor.records.plant import Deed, Revision, register_revision

NOW = 1_796_083_200_000_000
STEP = 10_000_000


def bits(block: Any) -> dict[str, Any]:
    """Everything in a block, arrays as type, shape and bytes: nan equals nan, -0.0 differs from 0.0."""
    found: dict[str, Any] = {}
    for field in fields(block):
        value = getattr(block, field.name)
        if isinstance(value, np.ndarray):
            value = (value.dtype, value.shape, value.tobytes())
        elif hasattr(value, "__dataclass_fields__"):
            value = bits(value)
        found[field.name] = value
    return found


def store(database: Database, plant: Any, first: int, count: int) -> tuple[ReadingsBlock, ResultsBlock]:
    readings, results = plant.readings(first, count), plant.results(first, count)
    with database.write() as connection:
        storing.store_readings(connection, plant.unit, readings)
        storing.store_results(connection, plant.unit, results)
    return readings, results


def test_readings_and_results_come_back_bit_for_bit(database: Database, plant: Any) -> None:
    readings, results = store(database, plant, 5, 40)
    (block,) = series.readings(database, plant.unit, 0, 1000)
    (again,) = series.published(database, plant.unit, 0, 1000)
    assert bits(block) == bits(readings)
    assert bits(again.results) == bits(results)
    assert again.times.tolist() == readings.readings.times.tolist()
    assert again.revision_id == plant.revision
    for array in (block.readings.u, block.readings.y_quality, again.results.sums):
        assert array.flags.c_contiguous
        assert array.flags.writeable


def test_storing_again_after_a_restart_changes_nothing(database: Database, plant: Any) -> None:
    store(database, plant, 0, 30)
    before = [bits(block) for block in series.published(database, plant.unit, 0, 99)]
    store(database, plant, 0, 20)
    readings, results = store(database, plant, 10, 40)
    after = [bits(block.results) for block in series.published(database, plant.unit, 0, 99)]
    assert [bits(block) for block in series.published(database, plant.unit, 0, 29)] == before
    assert after == [bits(plant.results(0, 50))]
    assert reader.events_since(database) == []
    assert bits(next(series.readings(database, plant.unit, 10, 49))) == bits(readings)
    assert bits(next(series.published(database, plant.unit, 10, 49)).results) == bits(results)


def test_other_readings_for_a_cycle_on_record_are_refused(database: Database, plant: Any) -> None:
    store(database, plant, 0, 4)
    block = plant.readings(2, 4)
    block.readings.y[1, 1] = 0.0
    assert not np.array_equal(block.readings.y, plant.readings(2, 4).readings.y)
    with (
        pytest.raises(RecordsError, match=r"cycle 3 of unit .* other readings"),
        database.write() as connection,
    ):
        storing.store_readings(connection, plant.unit, block)
    assert series.latest_cycle(database, plant.unit) == 3


def test_another_cycle_at_a_time_on_record_is_refused(database: Database, plant: Any) -> None:
    store(database, plant, 0, 4)
    moved = replace(plant.readings(3, 1), first_cycle=4)
    with pytest.raises(RecordsError, match="cycle 4"), database.write() as connection:
        storing.store_readings(connection, plant.unit, moved)


def test_a_result_that_differs_when_run_again_stays_and_is_told_once(database: Database, plant: Any) -> None:
    store(database, plant, 0, 3)
    for _ in range(2):
        with database.write() as connection:
            storing.store_results(connection, plant.unit, plant.results(1, 2, twist=9))
    (block,) = series.published(database, plant.unit, 0, 9)
    assert bits(block.results) == bits(plant.results(0, 3))
    told = reader.events_since(database, unit_id=plant.unit)
    assert [(item.event.kind, item.event.time_us) for item in told] == [
        ("results differ", NOW + STEP),
        ("results differ", NOW + 2 * STEP),
    ]


def test_results_without_readings_are_refused(database: Database, plant: Any) -> None:
    with pytest.raises(RecordsError, match="refused the work"), database.write() as connection:
        storing.store_results(connection, plant.unit, plant.results(0, 1))


def test_blocks_end_at_gaps_at_revisions_and_at_their_size(
    database: Database, plant: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(series, "BLOCK", 4)
    with database.write() as connection:
        other = register_revision(
            connection, plant.unit, Revision("cd" * 32, "[unit]\n", b""), Deed("someone", "second", NOW)
        )
        for block in (plant.readings(0, 6), plant.readings(9, 1), plant.readings(10, 2, other)):
            storing.store_readings(connection, plant.unit, block)
    found = [(b.first_cycle, len(b), b.revision_id) for b in series.readings(database, plant.unit, 1, 11)]
    first = plant.revision
    assert found == [(1, 4, first), (5, 1, first), (9, 1, first), (10, 2, other)]
    assert list(series.readings(database, plant.unit, 50, 60)) == []


def test_cycles_are_found_by_their_times(database: Database, plant: Any) -> None:
    assert series.latest_cycle(database, plant.unit) is None
    assert series.latest_results(database, plant.unit) is None
    store(database, plant, 0, 20)
    assert series.cycles_between(database, plant.unit, NOW + STEP, NOW + 5 * STEP) == range(1, 5)
    assert series.cycles_between(database, plant.unit, 0, NOW) == range(0)
    latest = series.latest_results(database, plant.unit)
    assert latest is not None
    assert bits(latest.results) == bits(plant.results(19, 1))


def test_the_newest_checkpoint_before_a_cycle_is_found(database: Database, plant: Any) -> None:
    assert series.last_checkpoint(database, plant.unit) is None
    with database.write() as connection:
        for cycle in (50, 100, 200):
            storing.store_checkpoint(connection, plant.unit, Checkpoint(cycle, 1, b"old"))
        storing.store_checkpoint(connection, plant.unit, Checkpoint(100, 2, b"new\x00"))
        storing.drop_checkpoints(connection, plant.unit, 100)
    assert series.last_checkpoint(database, plant.unit) == Checkpoint(200, 1, b"old")
    assert series.last_checkpoint(database, plant.unit, 199) == Checkpoint(100, 2, b"new\x00")
    assert series.last_checkpoint(database, plant.unit, 99) is None


def test_one_old_checkpoint_in_8192_cycles_stays(database: Database, plant: Any) -> None:
    with database.write() as connection:
        for cycle in (0, 64, 8128, 8192, 8256, 16384, 20032):
            storing.store_checkpoint(connection, plant.unit, Checkpoint(cycle, 1, b"state"))
        storing.drop_checkpoints(connection, plant.unit, 20000)
    left, at_most = [], 10**6
    while (found := series.last_checkpoint(database, plant.unit, at_most)) is not None:
        left.append(found.cycle)
        at_most = found.cycle - 1
    assert left == [20032, 16384, 8192, 0]


def test_what_was_decided_and_which_revisions_ran_is_found(database: Database, plant: Any) -> None:
    store(database, plant, 0, 20)
    assert series.decided(database, plant.unit, 3, 5) == [b"decided 3", b"decided 4", b"decided 5"]
    assert series.revisions_between(database, plant.unit, 0, 19) == [plant.revision]
    assert series.revisions_between(database, plant.unit, 20, 30) == []


def test_the_newest_revised_estimate_of_a_cycle_counts_and_the_published_stays(
    database: Database, plant: Any
) -> None:
    store(database, plant, 0, 5)
    with database.write() as connection:
        for at in (7, 9, 9):
            value = np.full((3, 1), -0.0 if at == 9 else 1.0)
            storing.store_revised(connection, plant.unit, RevisedEstimates(1, at, value, value + np.nan))
    found = series.revised(database, plant.unit, 0, 2)
    assert sorted(found) == [1, 2]
    assert found[2].revised_at_cycle == 9
    assert found[2].estimate.tobytes() == np.array([-0.0]).tobytes()
    assert bits(next(series.published(database, plant.unit, 0, 4)).results) == bits(plant.results(0, 5))


def test_rollups_are_replaced_not_added_to(database: Database, plant: Any) -> None:
    hour = 3_600_000_000
    old = [Rollup("TI2101A", "reading", hour, i * hour, 1.0, 2.0, 3.0, 360) for i in range(3)]
    new = replace(old[1], mean=2.5, count=359)
    with database.write() as connection:
        storing.store_rollups(connection, plant.unit, old)
        storing.store_rollups(connection, plant.unit, [new])
    assert series.rollups_between(database, plant.unit, hour, hour, 3 * hour) == [new, old[2]]


def test_the_same_revision_is_registered_once(database: Database, plant: Any) -> None:
    deed = Deed("someone", "again", NOW)
    with database.write() as connection:
        same = register_revision(connection, plant.unit, Revision("ab" * 32, "[unit]\n", b"\x00\x01"), deed)
    assert same == plant.revision
    assert len(reader.revisions_of(database, plant.unit)) == 1
    assert len(reader.audit_entries(database)) == 1
