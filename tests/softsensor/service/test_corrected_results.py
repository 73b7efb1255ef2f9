"""A laboratory corrects a value: live, on record, after stops, and replayed from the records."""

from __future__ import annotations

import asyncio
from dataclasses import replace
from typing import Any

import pytest

from connectors.readings import Reading
from softsensor.cycle import UnitDesign
from softsensor.recorded_data import prepare_from_records
from softsensor.records import audit, reader, series
from softsensor.records.engine import open_database

START, STEP = 1_796_083_200_000_000, 10_000_000
SAMPLED = START + 30 * STEP - 3_000_000
"""A sample of the story; its result comes before cycle 75."""


def corrected(story: Any, values: dict[int, float]) -> Any:
    """The story with further values of the sample, by the cycle before which each comes."""
    told = replace(story, arrivals=dict(story.arrivals))
    for cycle, value in values.items():
        told.arrivals[cycle] = [*told.arrivals[cycle], Reading("AL1", value, SAMPLED)]
    return told


def first_value(story: Any) -> float:
    return next(float(item.value) for item in story.arrivals[75] if item.tag == "AL1")


async def in_parts(bench: Any, story: Any, stops: tuple[int, ...]) -> None:
    first = 0
    for stop in stops:
        await bench.run(story, first, stop, cut=stop != stops[-1])
        first = stop


@pytest.mark.parametrize("stops", [(150,), (75, 91, 100, 121, 150)])
def test_the_newest_value_counts_and_the_others_stay_on_record(
    design: UnitDesign, new_bench: Any, story: Any, database_url: str, stops: tuple[int, ...]
) -> None:
    """Corrected, corrected back to the first value, and shown again by the server at every restart."""
    first = first_value(story)
    told = corrected(story, {90: first + 0.02, 120: first})
    asyncio.run(in_parts(new_bench(design, database_url), told, stops))
    with open_database(database_url) as database:
        labs = [lab for lab in reader.lab_results_of(database, 1) if lab.sampled_us == SAMPLED]
        assert [lab.value for lab in labs] == [first, first + 0.02, first]
        assert [lab.status for lab in labs] == ["left out", "left out", "used"]
        assert [lab.counted_cycle for lab in labs] == [None, None, 30]
        assert [lab.arrived_cycle for lab in labs] == [75, 90, 120]
        assert [lab.revises for lab in labs] == [None, labs[0].id, labs[1].id]
        assert (
            labs[0].reason == f"replaced by {first + 0.02:.6g}, which was reported later for the same sample"
        )
        assert labs[0].predicted == labs[1].predicted == labs[2].predicted
        told_events = [
            item.event for item in reader.events_since(database) if item.event.kind == "laboratory"
        ]
        assert [event.tag for event in told_events] == ["AL1", "AL1"]
        acts = [entry.action for entry in reader.audit_entries(database, limit=1000)]
        assert acts.count("laboratory result replaced") == 2
        assert audit.verify(database).whole
        revised = series.revised(database, 1, 30, 149)
        assert {item.revised_at_cycle for cycle, item in revised.items() if cycle < 120} == {120}
        digest = next(series.published(database, 1, 149, 149)).results.digests[-1].hex()
    running, _, _ = prepare_from_records(design.model, database_url, "R-1", None, None)
    for _ in running.stretches():
        pass
    assert running.digest == digest
    assert [lab.status for lab in running.totals.labs] == ["left out", "left out", "used"]


def test_the_estimate_after_a_correction_is_that_of_the_corrected_value_alone(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str, database_url: str
) -> None:
    first = first_value(story)
    alone = replace(story, arrivals=dict(story.arrivals))
    alone.arrivals[75] = [
        replace(item, value=first + 0.02) if item.tag == "AL1" else item for item in story.arrivals[75]
    ]
    asyncio.run(new_bench(design, sqlite_url).run(alone, 0, 130, cut=False))
    asyncio.run(new_bench(design, database_url).run(corrected(story, {90: first + 0.02}), 0, 130, cut=False))
    found = []
    for url in (sqlite_url, database_url):
        with open_database(url) as database:
            results = next(series.published(database, 1, 0, 129)).results
            found.append((results.estimate, results.sd))
    for one, other in zip(*found, strict=True):
        assert one[90:].tobytes() == other[90:].tobytes()
        assert one[:75].tobytes() == other[:75].tobytes()
    assert found[0][0][75:90].tobytes() != found[1][0][75:90].tobytes()
