"""A free port, and a small plant to serve."""

from __future__ import annotations

import socket

import pytest

from connectors.opcua.analog_item import EngineeringUnit
from connectors.opcua.tag_server import ServedTag


@pytest.fixture
def endpoint() -> str:
    """An OPC UA address on the loopback interface that nobody listens on."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return f"opc.tcp://127.0.0.1:{probe.getsockname()[1]}"


@pytest.fixture
def plant_tags() -> list[ServedTag]:
    degrees = EngineeringUnit.from_code("degC", "CEL")
    return [
        ServedTag(f"TI21{n:02d}", "R-210", degrees, (0.0, 200.0), f"temperature {n}") for n in range(1, 9)
    ]
