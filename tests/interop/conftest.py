"""An independent OPC UA peer (node-opcua, from npm) for these tests: installed once, outside the repository.

The folder is NODE_OPCUA_HOME, else one in the system's temporary folder. Where the peer cannot be had the
tests are skipped with the reason; with CI=true that is a failure.
"""

from __future__ import annotations

import asyncio
import os
import shutil
import socket
import subprocess
import tempfile
from dataclasses import dataclass
from pathlib import Path

import pytest

HERE = Path(__file__).parent
PLANT = "urn:example:peer-plant"
START_LIMIT = 60.0
"""Seconds that the peer may take to start on a busy machine."""


def _give_up(reason: str) -> None:
    if os.environ.get("CI") == "true":
        pytest.fail(f"the independent OPC UA peer is missing: {reason}")
    pytest.skip(f"the independent OPC UA peer is missing: {reason}")


def _home() -> Path:
    configured = os.environ.get("NODE_OPCUA_HOME")
    return Path(configured) if configured else Path(tempfile.gettempdir()) / "softsensor-interop-peer"


@pytest.fixture(scope="session")
def peer_modules() -> Path:
    """The folder with the peer's packages, installed if they are not there."""
    node, npm = shutil.which("node"), shutil.which("npm")
    if node is None or npm is None:
        _give_up("node and npm are not installed")
    home = _home()
    if not (home / "node_modules" / "node-opcua-server" / "package.json").exists():
        home.mkdir(parents=True, exist_ok=True)
        shutil.copy(HERE / "package.json", home / "package.json")
        command = [str(npm), "install", "--prefix", str(home), "--no-audit", "--no-fund", "--no-package-lock"]
        done = subprocess.run(command, cwd=home, capture_output=True, text=True, timeout=600)
        if done.returncode != 0:
            _give_up(f"npm install failed: {done.stderr.strip()[-500:]}")
    return home


@pytest.fixture
def free_port() -> int:
    """A port on the loopback address that nobody listens on."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@dataclass(frozen=True)
class Peer:
    """A running peer: its process, and the index that the plant's namespace has this time."""

    process: asyncio.subprocess.Process
    namespace_index: int

    async def kill(self) -> None:
        """SIGKILL, by process id."""
        if self.process.returncode is None:
            self.process.kill()
        await self.process.wait()


@dataclass(frozen=True)
class PeerStarter:
    """Starts the peer's server on one port, with its namespaces in any order."""

    modules: Path
    pki: Path
    port: int

    @property
    def endpoint(self) -> str:
        return f"opc.tcp://127.0.0.1:{self.port}"

    async def start(self, namespaces: list[str], without: str = "") -> Peer:
        """Start, and wait until clients may connect."""
        process = await asyncio.create_subprocess_exec(
            *("node", str(HERE / "peer_server.js"), "--modules", str(self.modules), "--pki", str(self.pki)),
            *("--port", str(self.port), "--namespaces", ",".join(namespaces), "--without", without),
            stdin=asyncio.subprocess.PIPE,
            stdout=asyncio.subprocess.PIPE,
            stderr=asyncio.subprocess.DEVNULL,
        )
        assert process.stdout is not None
        try:
            async with asyncio.timeout(START_LIMIT):
                while not (line := await process.stdout.readline()).startswith(b"READY "):
                    assert line, "the peer ended before it was ready"
        except BaseException:
            process.kill()
            await process.wait()
            raise
        return Peer(process, int(line.split()[1]))


@pytest.fixture
def peer_starter(peer_modules: Path, free_port: int, tmp_path_factory: pytest.TempPathFactory) -> PeerStarter:
    return PeerStarter(peer_modules, tmp_path_factory.getbasetemp() / "peer-pki", free_port)
