"""False flags from findings over the time really watched, with the exact interval of a Poisson count; both databases."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from scipy.stats import poisson

from softsensor.detection.flags import RestSpell
from softsensor.records import changes, happenings, storing
from softsensor.records.engine import Database
from softsensor.records.false_flags import Achieved, achieved, garwood, merged
from softsensor.records.happenings import Flag
from softsensor.records.rests import StoredRest, end_rests, rests_at, rests_of, store_rests

NOW, STEP = 1_796_083_200_000_000, 10_000_000
TAGS = ("TI2101A", "TI2101B")
CYCLES = 100


def spell(first: int, stop: int | None, tag: str = "", cause: str = "off") -> RestSpell:
    return RestSpell(cause, tag, NOW + first * STEP, None if stop is None else NOW + stop * STEP, "why")


@pytest.fixture
def watched(database: Database, plant: Any) -> Database:
    """A hundred cycles on record, flags of TI2101A with every finding and without, one of a kind that does not count."""
    findings = ("confirmed", "not confirmed", "process change", "undecided", None)
    with database.write() as connection:
        storing.store_readings(connection, plant.unit, plant.readings(0, CYCLES))
        for number in range(len(findings) + 1):
            kind = "lost" if number == len(findings) else "bias"
            name = happenings.flag_identity("R-210", "TI2101A", kind, NOW + number)
            flag = Flag(name, "TI2101A", kind, NOW, NOW + number, 1.0, 0.1, 0.97, ("TI2101A",))
            happenings.open_flag(connection, plant.unit, flag)
    for number, finding in enumerate(findings):
        if finding is not None:
            name = happenings.flag_identity("R-210", "TI2101A", "bias", NOW + number)
            changes.set_finding(database, name, finding, "A. Müller", "looked at it")
    return database


def counted(database: Database, plant: Any, disarmed: frozenset[str] = frozenset()) -> list[Achieved]:
    return achieved(database, plant.unit, TAGS, {plant.revision: (10.0, disarmed)})


def test_findings_are_counted_and_only_cycles_with_tests_that_run(watched: Database, plant: Any) -> None:
    with watched.write() as connection:
        spells = [
            spell(10, 20),
            spell(15, 30, cause="inputs missing"),
            spell(40, 50, "TI2101B", "maintenance"),
        ]
        store_rests(connection, plant.unit, spells)
    first, second = counted(watched, plant)
    assert (first.flags, first.confirmed, first.false, first.undecided) == (5, 1, 2, 2)
    assert (first.watched, second.watched) == (800.0, 700.0)
    assert (second.flags, second.interval, second.most) == (0, None, None)
    assert first.interval == 400.0


def test_a_rest_without_an_end_counts_to_the_last_cycle_until_it_has_one(
    watched: Database, plant: Any
) -> None:
    with watched.write() as connection:
        store_rests(connection, plant.unit, [spell(90, None)])
    assert counted(watched, plant)[0].watched == 900.0
    assert [rest.cause for rest in rests_at(watched, plant.unit, NOW + 95 * STEP)] == ["off"]
    with watched.write() as connection:
        store_rests(connection, plant.unit, [spell(90, 95)])
    assert counted(watched, plant)[0].watched == 950.0
    assert rests_at(watched, plant.unit, NOW + 95 * STEP) == []
    with watched.write() as connection:
        store_rests(connection, plant.unit, [spell(96, None)])
        assert end_rests(connection, plant.unit, NOW + 98 * STEP) == 1
    assert [rest.until_us for rest in rests_of(watched, plant.unit)] == [NOW + 95 * STEP, NOW + 98 * STEP]


def test_a_sensor_that_is_disarmed_is_not_watched(watched: Database, plant: Any) -> None:
    first, second = counted(watched, plant, frozenset({"TI2101B"}))
    assert (first.watched, second.watched) == (1000.0, 0.0)


@pytest.mark.parametrize("count", [0, 1, 2, 7, 30])
def test_the_interval_is_the_exact_one_of_a_poisson_count(count: int) -> None:
    """By the tail probabilities of the Poisson distribution itself."""
    low, high = garwood(count)
    assert poisson.cdf(count, high) == pytest.approx(0.025, rel=1e-9)
    assert low == 0.0 if count == 0 else poisson.sf(count - 1, low) == pytest.approx(0.025, rel=1e-9)


def test_undecided_flags_widen_the_interval_to_either_side() -> None:
    row = Achieved("TI1", 8, 1, 3, 4, 100.0)
    sure = replace(row, flags=4, undecided=0)
    assert row.least == pytest.approx(100.0 / garwood(7)[1])
    assert row.least < sure.least
    assert row.most == sure.most == pytest.approx(100.0 / garwood(3)[0])


def test_overlapping_rests_are_one() -> None:
    rests = [
        StoredRest("a", "", since, until, "")
        for since, until in ((5, 9), (1, 3), (2, 4), (8, None), (20, 30))
    ]
    assert merged(rests) == [(1, 4), (5, None)]
    covered = np.zeros(40, dtype=bool)
    for rest in rests[1:3]:
        covered[rest.since_us : rest.until_us] = True
    assert covered.sum() == 3
