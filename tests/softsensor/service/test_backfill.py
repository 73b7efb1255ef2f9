"""After an outage of the plant's server: live, on record, after stops, and replayed from the records."""

from __future__ import annotations

import asyncio
from collections.abc import Iterable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from connectors.readings import Reading
from softsensor.cycle import UnitDesign
from softsensor.recorded_data import prepare_from_records
from softsensor.records import reader, series
from softsensor.records.engine import open_database

START, STEP = 1_796_083_200_000_000, 10_000_000
FIRST, STOP, BACK, END = 110, 130, 136, 155
"""The connection is lost before cycle FIRST and comes back before cycle BACK with what the server kept."""


def interrupted(story: Any, tags: Iterable[str] = ("FI1", "TI1A", "TI2"), kept: bool = True) -> Any:
    """The story with an outage: what was measured meanwhile comes before cycle BACK, or never."""
    told = replace(story, arrivals=dict(story.arrivals))
    held_back: list[Reading] = []
    for cycle in range(FIRST, STOP):
        here = story.arrivals[cycle]
        held_back += [item for item in here if item.tag in tags]
        told.arrivals[cycle] = [item for item in here if item.tag not in tags]
    if kept:
        told.arrivals[BACK] = [*held_back, *story.arrivals[BACK]]
    return told


async def in_parts(bench: Any, story: Any, stops: tuple[int, ...]) -> None:
    first = 0
    for stop in stops:
        await bench.run(story, first, stop, cut=stop != stops[-1])
        first = stop


def estimates(url: str, end: int = END) -> tuple[np.ndarray, np.ndarray]:
    with open_database(url) as database:
        results = next(series.published(database, 1, 0, end - 1)).results
        return results.estimate, results.sd


def replayed_digest(design: UnitDesign, url: str) -> str:
    running, _, _ = prepare_from_records(design.model, url, "R-1", None, None)
    for _ in running.stretches():
        pass
    return running.digest


def told_of(url: str, kind: str = "late readings") -> list[str]:
    with open_database(url) as database:
        return [item.event.text for item in reader.events_since(database) if item.event.kind == kind]


def test_after_an_outage_the_estimate_is_that_of_readings_in_time(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str, database_url: str
) -> None:
    asyncio.run(new_bench(design, sqlite_url).run(story, 0, END, cut=False))
    asyncio.run(new_bench(design, database_url).run(interrupted(story), 0, END, cut=False))
    (one, one_sd), (other, other_sd) = estimates(sqlite_url), estimates(database_url)
    assert one[:FIRST].tobytes() == other[:FIRST].tobytes()
    assert one[BACK:].tobytes() == other[BACK:].tobytes()
    assert one_sd[BACK:].tobytes() == other_sd[BACK:].tobytes()
    with open_database(database_url) as database:
        revised = series.revised(database, 1, FIRST, BACK - 1)
        digest = next(series.published(database, 1, END - 1, END - 1)).results.digests[-1].hex()
        seen = next(series.readings(database, 1, FIRST, STOP - 1)).readings
    assert list(revised) == list(range(FIRST, BACK))
    assert {item.revised_at_cycle for item in revised.values()} == {BACK}
    for cycle, item in revised.items():
        assert item.estimate.tobytes() == one[cycle].tobytes() != other[cycle].tobytes()
    assert np.isnan(seen.y[:, 0]).all()  # what the cycles saw stays as it was
    ago = (BACK - FIRST) * 10
    assert told_of(database_url) == [
        f"late readings of FI1, TI1A, TI2: the estimate has gone back {ago} s and forward again with them; "
        "what was published and flagged stays"
    ]
    assert replayed_digest(design, database_url) == digest
    assert told_of(sqlite_url) == []


@pytest.mark.parametrize(
    ("stops", "not_used", "from_cycle"),
    [
        ((115, END), 3, 116),
        ((BACK - 1, 150, END), 3, None),
        ((BACK, BACK + 1, 150, END), 0, FIRST),
        ((140, 150, END), 0, FIRST),
    ],
)
def test_after_a_restart_what_lies_before_it_is_told_and_not_used(
    design: UnitDesign,
    new_bench: Any,
    story: Any,
    database_url: str,
    stops: tuple[int, ...],
    not_used: int,
    from_cycle: int | None,
) -> None:
    """What the cycles before had heard is not known any more; what was stored with a cycle is used."""
    asyncio.run(in_parts(new_bench(design, database_url), interrupted(story), stops))
    with open_database(database_url) as database:
        digest = next(series.published(database, 1, END - 1, END - 1)).results.digests[-1].hex()
        revised = series.revised(database, 1, FIRST, STOP - 1)
    assert replayed_digest(design, database_url) == digest
    texts = told_of(database_url)
    assert sum("they are from before this service was started" in text for text in texts) == not_used
    assert len(texts) - not_used == (from_cycle is not None)
    assert min(revised, default=None) == from_cycle


def test_a_late_result_after_a_restart_is_judged_with_what_came_late_before_it(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str, database_url: str
) -> None:
    """The result of the story that comes at cycle 160 counts at 100, before the outage."""
    for url, stops in ((sqlite_url, (180,)), (database_url, (150, 158, 180))):
        asyncio.run(in_parts(new_bench(design, url), interrupted(story), stops))
    for one, other in zip(estimates(sqlite_url, 180), estimates(database_url, 180), strict=True):
        assert one.tobytes() == other.tobytes()


def test_what_a_server_shows_again_is_not_late(
    design: UnitDesign, new_bench: Any, story: Any, database_url: str
) -> None:
    told = replace(story, arrivals=dict(story.arrivals))
    again = [*told.arrivals[100], *told.arrivals[101], *told.arrivals[110]]
    told.arrivals[112] = [*again, *story.arrivals[112]]
    asyncio.run(new_bench(design, database_url).run(told, 0, END, cut=False))
    assert told_of(database_url) == []
    assert replayed_digest(design, database_url)


def test_two_results_at_once_leave_the_estimate_with_both_on_record(
    design: UnitDesign, new_bench: Any, story: Any, database_url: str
) -> None:
    told = replace(story, arrivals=dict(story.arrivals))
    value = next(item.value for item in story.arrivals[75] if item.tag == "AL1")
    told.arrivals[75] = [*story.arrivals[75], Reading("AL1", value + 0.01, START + 28 * STEP)]
    bench = new_bench(design, database_url)
    asyncio.run(bench.run(told, 0, 90, cut=False))
    step = next(step for step in bench.steps if step.results.first == 75)
    assert len(step.revisions) == 2
    with open_database(database_url) as database:
        revised = series.revised(database, 1, 30, 74)
    for cycle, item in revised.items():
        assert (
            item.estimate.tobytes() == step.revisions[-1].estimate[cycle - step.revisions[-1].first].tobytes()
        )


def test_a_plant_s_clock_that_is_set_back_does_not_write_over_the_past(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str, database_url: str
) -> None:
    """From cycle 100 on the server stamps TI1A five minutes too early; that is told once, and the past stays."""
    away, back = replace(story, arrivals=dict(story.arrivals)), replace(story, arrivals=dict(story.arrivals))
    for cycle in range(100, 120):
        here = story.arrivals[cycle]
        away.arrivals[cycle] = [item for item in here if item.tag != "TI1A"]
        back.arrivals[cycle] = [
            replace(item, time=item.time - 30 * STEP + 400_000) if item.tag == "TI1A" else item
            for item in here
        ]
    asyncio.run(new_bench(design, sqlite_url).run(away, 0, END, cut=False))
    asyncio.run(new_bench(design, database_url).run(back, 0, END, cut=False))
    for one, other in zip(estimates(sqlite_url), estimates(database_url), strict=True):
        assert one.tobytes() == other.tobytes()
    (text,) = told_of(database_url)
    assert text.startswith(
        "a late reading of TI1A, up to 301 s old, not used: their cycles have a reading already"
    )
    assert replayed_digest(design, database_url)


def test_a_gap_filled_in_parts_ends_as_if_filled_at_once(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str, database_url: str
) -> None:
    """Two readings to a cycle, handed over in any order, some cycles apart: the newest of each cycle counts."""
    told, shuffled = (replace(story, arrivals=dict(story.arrivals)) for _ in range(2))
    extra: list[Reading] = []
    for cycle in range(FIRST, STOP):
        kept = [item for item in story.arrivals[cycle] if item.tag == "TI2"]
        early = [replace(item, time=item.time - 4_000_000, value=80.0) for item in kept]
        for into in (told, shuffled):
            into.arrivals[cycle] = [item for item in story.arrivals[cycle] if item.tag != "TI2"]
        told.arrivals[BACK] = [*told.arrivals[BACK], *early, *kept]
        extra += [*kept[::-1], *early]
    for number, item in enumerate(sorted(extra, key=lambda item: item.value)):
        shuffled.arrivals[BACK + number % 5] = [*shuffled.arrivals[BACK + number % 5], item]
    asyncio.run(new_bench(design, sqlite_url).run(told, 0, END, cut=False))
    asyncio.run(new_bench(design, database_url).run(shuffled, 0, END, cut=False))
    for one, other in zip(estimates(sqlite_url), estimates(database_url), strict=True):
        assert one[BACK + 5 :].tobytes() == other[BACK + 5 :].tobytes()
