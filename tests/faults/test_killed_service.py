"""The real service killed with SIGKILL twice: its records are whole, and a replay of them gives its digest."""

from __future__ import annotations

import asyncio
import json
from pathlib import Path
from typing import Any

from softsensor.records import audit, reader, series
from softsensor.records.engine import Database, open_database


def cycles(database: Database) -> int:
    """How many cycles of the one unit have results on record."""
    units = reader.all_units(database)
    latest = series.latest_results(database, units[0].id) if units else None
    return 0 if latest is None else latest.results.first_cycle + 1


def readings_used(database: Database, first: int) -> int:
    """How many readings cycles from ``first`` on have used."""
    return sum(int(block.results.used.sum()) for block in series.published(database, 1, first, 1_000_000))


async def killed_twice(plant: Any) -> tuple[list[int], str]:
    """Run, kill, run, kill, run, end in order; the cycles on record at each start, and all that was said."""
    starts, said = [], ""
    site = plant.site("site.toml")
    with open_database(plant.url) as database:
        for attempt in range(3):
            starts.append(cycles(database))
            process = await plant.start("run", site)
            await plant.until(lambda first=starts[-1]: readings_used(database, first + 1) >= 70)
            if attempt < 2:
                process.kill()
            else:
                process.terminate()
            status, out, err = await plant.finished(process)
            said += out + err
            assert status == (0 if attempt == 2 else -9)
    return starts, said


def test_a_service_killed_twice_goes_on_and_replays_to_its_digest(tmp_path: Path, new_plant: Any) -> None:
    async def story() -> tuple[list[int], str, dict[str, Any]]:
        async with new_plant(tmp_path) as plant:
            starts, said = await killed_twice(plant)
            out = tmp_path / "results"
            process = await plant.start("replay", plant.model, plant.url, "--out", out, "--json")
            status, text, err = await plant.finished(process)
            assert (status, err) == (0, "")
            return starts, said, json.loads(text)

    starts, said, summary = asyncio.run(story())
    assert 0 == starts[0] < starts[1] < starts[2]
    assert "Traceback" not in said
    with open_database(f"sqlite:///{(tmp_path / 'records.db').as_posix()}") as database:
        blocks = list(series.published(database, 1, 0, 1_000_000))
        assert (len(blocks), blocks[0].results.first_cycle) == (1, 0)
        assert set(blocks[0].times[1:] - blocks[0].times[:-1]) == {10_000_000}
        assert summary["cycles"] == len(blocks[0].times)
        assert summary["digest"] == blocks[0].results.digests[-1].hex()
        kinds = [item.event.kind for item in reader.events_since(database)]
        assert kinds.count("restart") == 2
        assert "results differ" not in kinds
        labs = reader.lab_results_of(database, 1)
        estimate = summary["estimates"]["AY1"]
        assert estimate["lab_count"] == sum(lab.status == "used" for lab in labs) >= 1
        assert estimate["lab_count"] + estimate["lab_left_out"] == len(labs)
        assert len({(lab.sampled_us, lab.value) for lab in labs}) == len(labs)
        assert {flag.kind for flag in reader.flags_of(database)} <= {"lost"}  # while the service was away
        assert audit.verify(database).whole
