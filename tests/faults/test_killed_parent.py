"""``softsensor run --until-input-ends`` ends with the program that started it, however that one ended."""

from __future__ import annotations

import asyncio
import os
import sys
from pathlib import Path
from typing import Any

import pytest
from independent.small_unit import command_line

from softsensor.records.engine import open_database
from softsensor.records.series import latest_cycle

PARENT = """
import asyncio, pathlib, sys
from softsensor.demonstration.service_side import ServiceProcess

async def main():
    service = ServiceProcess(pathlib.Path(sys.argv[1]), print)
    keeping = asyncio.create_task(service.keep_running())
    while service.pid is None:
        await asyncio.sleep(0)
    print(service.pid, flush=True)
    await keeping

asyncio.run(main())
"""
"""What the demonstration does with its service."""


def running(pid: int) -> bool:
    """Is there a process of this id that has not ended? One that nobody waits for has ended too."""
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except FileNotFoundError:
        return False


@pytest.mark.skipif(sys.platform != "linux", reason="looks at processes in /proc")
def test_a_killed_parent_takes_the_service_with_it(tmp_path: Path, new_plant: Any) -> None:
    async def story() -> None:
        async with new_plant(tmp_path) as plant:
            site = str(plant.site("site.toml"))
            parent = await asyncio.create_subprocess_exec(
                sys.executable, "-c", PARENT, site, stdout=asyncio.subprocess.PIPE
            )
            plant.processes.append(parent)
            assert parent.stdout is not None
            child = int(await parent.stdout.readline())
            try:
                with open_database(plant.url) as database:
                    await plant.until(lambda: (latest_cycle(database, 1) or 0) > 5)
                assert running(child)
                parent.kill()
                await plant.until(lambda: not running(child))
            finally:
                if running(child):
                    os.kill(child, 9)
            said = (await parent.stdout.read()).decode()
            assert "running" in said

    asyncio.run(story())


def test_input_that_has_ended_already_ends_the_service(tmp_path: Path, new_plant: Any) -> None:
    async def story() -> None:
        async with new_plant(tmp_path) as plant:
            process = await asyncio.create_subprocess_exec(
                *command_line("run", plant.site("site.toml"), "--until-input-ends"),
                stdin=asyncio.subprocess.DEVNULL,
                stdout=asyncio.subprocess.PIPE,
                stderr=asyncio.subprocess.PIPE,
            )
            plant.processes.append(process)
            status, out, err = await plant.finished(process)
            assert (status, err) == (0, "")
            assert "preparing (" in out

    asyncio.run(story())
