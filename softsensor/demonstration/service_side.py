"""The service's side of the demonstration: the real ``run`` command in a process of its own, started again if it dies."""

from __future__ import annotations

import asyncio
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

from connectors.opcua.tag_server import TagServer
from plant_models.plant_model import PlantModel

STOP_PATIENCE = 20.0


def site_text(
    model: PlantModel, model_file: Path, server: TagServer, speed: float, ports: tuple[int, int]
) -> str:
    """A site file for the simulated plant; ``ports`` of our own OPC UA server and of the page."""
    tags = [*model.input_tags, *model.sensor_tags]
    tags += [item.lab.tag for item in model.spec.estimates if item.lab is not None]
    nodes = ", ".join(f'{tag} = "{server.node_id(tag)}"' for tag in tags)
    return f"""# Written by softsensor demo. Everything here is on this machine.
[database]
url = "sqlite:///{(model_file.parent / "records.db").as_posix()}"

[plant]
endpoint = "{server.endpoint}"
security_policy = "None"          # allowed because the address is a loopback address
publishing_interval = 0.02

[publish]
endpoint = "opc.tcp://127.0.0.1:{ports[0]}"

[web]
address = "127.0.0.1:{ports[1]}"

[clock]                           # the simulated plant's time runs faster than the wall's
speed = {speed}

[[unit]]
model = "{model_file.name}"
nodes = {{ {nodes} }}
"""


class ServiceProcess:
    """The service as a child process."""

    def __init__(self, site_file: Path, tell: Callable[[str], None]) -> None:
        self._site_file = site_file
        self._tell = tell
        self._process: asyncio.subprocess.Process | None = None
        self.restarts = 0

    @property
    def pid(self) -> int | None:
        """The child's process id."""
        return self._process.pid if self._process is not None else None

    async def keep_running(self) -> None:
        """Start the service and start it again whenever it dies by itself, until cancelled.

        :raises RuntimeError: it ended with bad input, which no restart mends.
        """
        while True:
            self._process = await self._start()
            status = await self._process.wait()
            if status in (0, 2):
                raise RuntimeError(f"the service ended with status {status}")
            self.restarts += 1
            self._tell(
                f"the service died (status {status}) and is started again; it goes on from its records"
            )

    async def _start(self) -> asyncio.subprocess.Process:
        """The child, which ends with us however we end: nothing is written to its input, which stays open till then."""
        command = [sys.executable, "-m", "softsensor", "run", str(self._site_file), "--until-input-ends"]
        if sys.platform == "win32":
            return await asyncio.create_subprocess_exec(
                *command,
                stdin=asyncio.subprocess.PIPE,
                creationflags=subprocess.CREATE_NEW_PROCESS_GROUP,
            )
        return await asyncio.create_subprocess_exec(*command, stdin=asyncio.subprocess.PIPE)

    async def ready(self, port: int) -> None:
        """Wait until the page answers: models are compiled, the plant is connected, the records are open."""
        while True:
            try:
                _, writer = await asyncio.open_connection("127.0.0.1", port)
            except OSError:
                await asyncio.sleep(0.1)
                continue
            writer.close()
            await writer.wait_closed()
            return

    async def stop(self) -> None:
        """End the service in order, and by force only where that takes too long."""
        process = self._process
        if process is None or process.returncode is not None:
            return
        if sys.platform == "win32":
            process.send_signal(signal.CTRL_BREAK_EVENT)
        else:
            process.send_signal(signal.SIGTERM)
        try:
            await asyncio.wait_for(process.wait(), STOP_PATIENCE)
        except TimeoutError:
            process.kill()
            await process.wait()
