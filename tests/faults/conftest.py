"""A small plant behind a real OPC UA server, and the ``run`` command in processes of their own."""

from __future__ import annotations

import asyncio
import socket
import time
from collections.abc import AsyncIterator, Callable
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pytest
from independent.small_unit import MODEL, command_line

from connectors.opcua.analog_item import EngineeringUnit
from connectors.opcua.tag_server import ServedTag, TagServer
from softsensor.records.upgrade import upgrade_database
from softsensor.service.clock import ScaledClock, wait_until

STEP = 10_000_000
SPEED = 240.0
DEADLINE = 300.0
"""Seconds; the first start on a machine compiles."""


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


@dataclass
class Plant:
    """The plant's server and its clock, and the site file of a service that reads it."""

    folder: Path
    server: TagServer
    clock: ScaledClock
    processes: list[asyncio.subprocess.Process] = field(default_factory=list)

    @property
    def model(self) -> Path:
        return self.folder / "r1.toml"

    @property
    def url(self) -> str:
        return f"sqlite:///{(self.folder / 'records.db').as_posix()}"

    def site(self, name: str, more: str = "", nodes: dict[str, str] | None = None) -> Path:
        """A site file; ``more`` are sections of its own, ``nodes`` in place of the right ones."""
        ids = self.server.node_ids() | (nodes or {})
        table = ", ".join(f'{tag} = "{node}"' for tag, node in ids.items())
        path = self.folder / name
        path.write_text(
            f'[database]\nurl = "{self.url}"\n[plant]\nendpoint = "{self.server.endpoint}"\n'
            f'security_policy = "None"\npublishing_interval = 0.02\n[clock]\nspeed = {SPEED}\n{more}\n'
            f'[[unit]]\nmodel = "{self.model.name}"\nnodes = {{ {table} }}\n'
        )
        return path

    async def start(self, *arguments: str | Path) -> asyncio.subprocess.Process:
        """A softsensor command in a process of its own."""
        process = await asyncio.create_subprocess_exec(
            *command_line(*arguments),
            stdout=asyncio.subprocess.PIPE,
            stderr=asyncio.subprocess.PIPE,
        )
        self.processes.append(process)
        return process

    async def finished(self, process: asyncio.subprocess.Process) -> tuple[int, str, str]:
        """Status, standard output and standard error of a process that ends by itself."""
        async with asyncio.timeout(DEADLINE):
            out, err = await process.communicate()
        assert process.returncode is not None
        return process.returncode, out.decode(), err.decode()

    async def until(self, holds: Callable[[], bool]) -> None:
        """Wait until something holds, looking at it twenty times a second."""
        async with asyncio.timeout(DEADLINE):
            while not await asyncio.to_thread(holds):
                await asyncio.sleep(0.05)

    async def live(self) -> None:
        """The plant's life on its clock: readings every ten seconds, a laboratory result every half hour."""
        random = np.random.default_rng(3)
        moment, number = self.clock.plant_start, 0
        while True:
            await wait_until(self.clock, moment)
            await self.server.write("FI1", 11.5 + 0.2 * float(np.sin(number / 40)), moment)
            await self.server.write("TI1", 92.4 + 0.15 * float(random.standard_normal()), moment)
            if number % 180 == 60:
                await self.server.write(
                    "AL1", 1.32 + 0.02 * float(random.standard_normal()), moment - 40 * STEP
                )
            moment, number = moment + STEP, number + 1
            await asyncio.sleep(0)


@asynccontextmanager
async def living_plant(folder: Path) -> AsyncIterator[Plant]:
    """A plant that lives; processes started by the test are ended with it."""
    (folder / "r1.toml").write_text(MODEL)
    upgrade_database(f"sqlite:///{(folder / 'records.db').as_posix()}")
    unit = EngineeringUnit.from_code("degC", "CEL")
    tags = [ServedTag(tag, "R-1", unit, (0.0, 200.0)) for tag in ("FI1", "TI1", "AL1")]
    wall = time.time_ns() // 1000
    clock = ScaledClock(wall // STEP * STEP, wall, SPEED)
    async with TagServer(f"opc.tcp://127.0.0.1:{free_port()}", "urn:example:plant", tags) as server:
        plant = Plant(folder, server, clock)
        life = asyncio.create_task(plant.live())
        try:
            yield plant
        finally:
            life.cancel()
            for process in plant.processes:
                if process.returncode is None:
                    process.kill()
                    await process.communicate()


@pytest.fixture
def new_plant() -> Callable[[Path], object]:
    """Makes a living plant in a folder."""
    return living_plant
