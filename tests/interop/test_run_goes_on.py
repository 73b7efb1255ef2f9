"""The ``run`` command against node-opcua: qualities as they should be, and estimates that go on after every kill."""

from __future__ import annotations

import asyncio
import time
from pathlib import Path
from typing import Any

import numpy as np
from independent.small_unit import command_line

from softsensor.readings_of_cycle import CycleQuality
from softsensor.records import series
from softsensor.records.engine import Database, open_database
from softsensor.records.upgrade import upgrade_database

PLANT = "urn:example:peer-plant"
OTHERS = ("urn:example:one", "urn:example:two", "urn:example:three")
SENSORS = ("FAST", "UNCERTAIN", "BAD", "HIGH", "LOW")
QUALITIES = (
    CycleQuality.GOOD,
    CycleQuality.UNCERTAIN,
    CycleQuality.BAD,
    CycleQuality.GOOD,
    CycleQuality.UNCERTAIN,
)
"""As the peer serves them: limit bits do not change a quality's meaning (OPC UA Part 4, 7.39)."""
RECOVERY_LIMIT = 5.0
"""Seconds from the server being ready to an estimate that rests on new readings."""
FIRST_START = 300.0
"""The first start on a machine compiles."""
KILLS = 10

SENSOR = """
[[sensor]]
tag = "{tag}"
unit = "1"
operating_point = 1000.0
range = [0.0, 1e7]
noise_sd = 1000.0
[[transfer_function]]
from = "GOOD"
to = "{tag}"
gain = 0.5
time_constants = ["4 s"]
[[transfer_function]]
from = "feed"
to = "{tag}"
gain = 1.0
time_constants = ["4 s"]
"""
MODEL = """
[unit]
name = "R-210"
sample_time = "500 ms"
[[input]]
tag = "GOOD"
unit = "1"
operating_point = 1000.0
range = [0.0, 1e7]
[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.0
range = [0.0, 4.0]
[[disturbance]]
name = "feed"
sd = 100.0
time_constant = "1 min"
[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.001
time_constants = ["6 s"]
""" + "".join(SENSOR.format(tag=tag) for tag in SENSORS)


def write_site(folder: Path, endpoint: str) -> tuple[Path, str]:
    """Model, site file and an upgraded database in a folder; the site file and the database's address."""
    url = f"sqlite:///{(folder / 'records.db').as_posix()}"
    upgrade_database(url)
    (folder / "r210.toml").write_text(MODEL, encoding="utf-8")
    nodes = ", ".join(f'{tag} = "nsu={PLANT};s=R210.{tag}"' for tag in ("GOOD", *SENSORS))
    site = folder / "site.toml"
    site.write_text(
        f'[database]\nurl = "{url}"\n[plant]\nendpoint = "{endpoint}"\nsecurity_policy = "None"\n'
        f'publishing_interval = 0.1\n[[unit]]\nmodel = "r210.toml"\nnodes = {{ {nodes} }}\n',
        encoding="utf-8",
    )
    return site, url


def rests_on_readings_since(database: Database, moment: int) -> bool:
    """Has a cycle after ``moment`` (UTC microseconds) an estimate and every reading with its right quality?"""
    latest = series.latest_results(database, 1)
    if latest is None or latest.times[-1] <= moment or not np.all(np.isfinite(latest.results.estimate)):
        return False
    cycle = latest.results.first_cycle
    block = next(series.readings(database, 1, cycle, cycle))
    return (
        tuple(block.readings.y_quality[0]) == QUALITIES
        and block.readings.u_quality[0, 0] == CycleQuality.GOOD
    )


async def until_fresh(database: Database, limit: float) -> float:
    """Seconds until an estimate rests on readings from after this call."""
    began, moment = time.monotonic(), time.time_ns() // 1000
    async with asyncio.timeout(limit):
        while not await asyncio.to_thread(rests_on_readings_since, database, moment):
            await asyncio.sleep(0.05)
    return time.monotonic() - began


def namespaces(start: int) -> list[str]:
    """Another order for each start, so that the plant's namespace has another index."""
    place = start % (len(OTHERS) + 1)
    return [*OTHERS[:place], PLANT, *OTHERS[place:]]


def test_estimates_go_on_after_each_of_ten_kills_of_the_plants_server(
    peer_starter: Any, tmp_path: Path
) -> None:
    site, url = write_site(tmp_path, peer_starter.endpoint)

    async def scenario() -> tuple[list[float], list[int]]:
        delays, indices = [], []
        peer = await peer_starter.start(namespaces(0))
        service = await asyncio.create_subprocess_exec(*command_line("run", site))
        try:
            with open_database(url) as database:
                await until_fresh(database, FIRST_START)
                for start in range(1, KILLS + 1):
                    await peer.kill()
                    peer = await peer_starter.start(namespaces(start))
                    indices.append(peer.namespace_index)
                    delays.append(await until_fresh(database, 60.0))
        finally:
            await peer.kill()
            if service.returncode is None:
                service.kill()
            await service.wait()
        return delays, indices

    delays, indices = asyncio.run(scenario())
    print("seconds until estimates went on:", [round(delay, 2) for delay in delays])
    assert len(set(indices)) > 1
    assert all(delay <= RECOVERY_LIMIT for delay in delays), delays
