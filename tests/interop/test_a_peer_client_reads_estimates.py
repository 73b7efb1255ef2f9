"""node-opcua's client against our publisher: what it sees, and that it goes on after our server was killed."""

from __future__ import annotations

import asyncio
import json
import sys
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

HERE = Path(__file__).parent
NODE = "nsu=urn:softsensor;s=R-210.Estimates.AY2101"
START = datetime(2026, 12, 1, 6, 0, tzinfo=UTC)
PATIENCE = 90.0

Process = asyncio.subprocess.Process


async def spawn(*command: str) -> Process:
    return await asyncio.create_subprocess_exec(
        *command,
        stdin=asyncio.subprocess.PIPE,
        stdout=asyncio.subprocess.PIPE,
        stderr=asyncio.subprocess.DEVNULL,
    )


async def publishing(endpoint: str, first: int) -> Process:
    process = await spawn(sys.executable, str(HERE / "publishing_process.py"), endpoint, str(first))
    assert process.stdout is not None
    async with asyncio.timeout(PATIENCE):
        assert await process.stdout.readline() == b"READY\n"
    return process


async def kill(process: Process) -> None:
    if process.returncode is None:
        process.kill()
    await process.wait()


async def lines_from(process: Process, first: int, count: int) -> list[dict[str, Any]]:
    """The next ``count`` Good or Uncertain values at or above ``first`` that the client printed."""
    assert process.stdout is not None
    seen: list[dict[str, Any]] = []
    async with asyncio.timeout(PATIENCE):
        while len(seen) < count:
            line = await process.stdout.readline()
            assert line, "the client ended"
            if not line.startswith(b"{"):
                continue  # the library's own log
            said = json.loads(line)
            if said["value"] is not None and said["value"] >= first and len(said["interval"]) == 3:
                seen.append(said)
    return seen


def test_values_status_times_and_interval_reach_an_independent_client_across_a_restart(
    peer_modules: Path, free_port: int, tmp_path_factory: pytest.TempPathFactory
) -> None:
    endpoint = f"opc.tcp://127.0.0.1:{free_port}"
    pki = tmp_path_factory.getbasetemp() / "peer-client-pki"

    async def scenario() -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
        server = await publishing(endpoint, 1000)
        client = await spawn(
            *("node", str(HERE / "peer_client.js"), "--modules", str(peer_modules), "--pki", str(pki)),
            *("--endpoint", endpoint, "--node", NODE),
        )
        try:
            before = await lines_from(client, 1000, 10)
            await kill(server)
            server = await publishing(endpoint, 5000)
            after = await lines_from(client, 5000, 10)
        finally:
            await kill(client)
            await kill(server)
        return before, after

    before, after = asyncio.run(scenario())
    for said in (*before, *after):
        count = int(said["value"])
        assert said["status"] == (0x40930000 if count % 2 else 0)
        assert datetime.fromisoformat(said["time"]) == START + timedelta(seconds=10 * count)
        sd, lower, upper = said["interval"]
        assert sd == 0.5
        assert upper - lower == 2.0
    values = [said["value"] for said in before]
    assert values == [values[0] + step for step in range(10)]
