"""The source against node-opcua: values, qualities, limit bits, a server that is killed again and again."""

from __future__ import annotations

import asyncio
import itertools
import time
from collections.abc import AsyncIterator, Callable
from typing import Any

import pytest

from connectors.errors import NodeError
from connectors.events import ConnectionChange, SourceEvent
from connectors.opcua.quality import Limit, limit_of, status_text
from connectors.opcua.settings import OpcUaSettings
from connectors.opcua.source import OpcUaSource
from connectors.readings import Quality, Reading

PLANT = "urn:example:peer-plant"
TAGS = ("GOOD", "FAST", "BAD", "UNCERTAIN", "HIGH", "LOW")
RECOVERY_LIMIT = 5.0
"""Seconds from a server being ready to the first fresh reading of every tag."""
PATIENCE = 60.0

# OPC UA Part 6, table of status codes (READ): BadSensorFailure 808C0000, UncertainSensorNotAccurate 40930000,
# UncertainEngineeringUnitsExceeded 40940000. Part 4, 7.39 (READ): limit low 01 and high 10 in bits 8-9, with
# bits 10-11 = 01 for a data value.
EXPECTED = {
    "GOOD": (Quality.GOOD, 0x00000000, "Good"),
    "FAST": (Quality.GOOD, 0x00000000, "Good"),
    "BAD": (Quality.BAD, 0x808C0000, "BadSensorFailure"),
    "UNCERTAIN": (Quality.UNCERTAIN, 0x40930000, "UncertainSensorNotAccurate"),
    "HIGH": (Quality.GOOD, 0x00000600, "Good, limit high"),
    "LOW": (Quality.UNCERTAIN, 0x40940500, "UncertainEngineeringUnitsExceeded, limit low"),
}


def node_ids(*tags: str) -> dict[str, str]:
    return {tag: f"nsu={PLANT};s=R210.{tag}" for tag in tags}


def settings(endpoint: str) -> OpcUaSettings:
    return OpcUaSettings(endpoint, publishing_interval=0.05, sampling_interval=0.0)


async def until(events: AsyncIterator[SourceEvent], done: Callable[[SourceEvent], bool]) -> None:
    async for event in events:
        if done(event):
            return
    raise AssertionError("the source ended")


def every_tag_since(moment: int, tags: tuple[str, ...] = TAGS) -> Callable[[SourceEvent], bool]:
    """True once each tag has had a reading whose source time is after ``moment`` (UTC microseconds)."""
    missing = set(tags)

    def seen(event: SourceEvent) -> bool:
        if isinstance(event, Reading) and event.time > moment:
            missing.discard(event.tag)
        return not missing

    return seen


def now() -> int:
    return time.time_ns() // 1000


def test_values_qualities_and_limit_bits_arrive(peer_starter: Any) -> None:
    async def scenario() -> list[Reading]:
        peer = await peer_starter.start([PLANT])
        readings: list[Reading] = []
        try:
            source = OpcUaSource(settings(peer_starter.endpoint), node_ids(*TAGS))
            await source.probe()
            async with source, asyncio.timeout(PATIENCE):
                async for event in source.events():
                    if isinstance(event, Reading):
                        readings.append(event)
                    if all(sum(r.tag == tag for r in readings) >= 20 for tag in TAGS):
                        break
        finally:
            await peer.kill()
        assert asyncio.all_tasks() == {asyncio.current_task()}
        return readings

    readings = asyncio.run(scenario())
    for tag in TAGS:
        own = [reading for reading in readings if reading.tag == tag]
        quality, status, text = EXPECTED[tag]
        assert {(r.quality, r.status) for r in own} == {(quality, status)}, tag
        assert status_text(own[0].status) == text
        times = [reading.time for reading in own]
        assert times == sorted(set(times)), "each change arrives once, in the order of its source time"
    for tag in ("GOOD", "FAST", "UNCERTAIN"):
        values = [reading.value for reading in readings if reading.tag == tag]
        assert values == [values[0] + step for step in range(len(values))], "no change is missing"
    assert limit_of(EXPECTED["HIGH"][1]) is Limit.HIGH
    assert limit_of(EXPECTED["LOW"][1]) is Limit.LOW


def test_readings_go_on_after_each_of_ten_kills_with_other_namespace_indices(peer_starter: Any) -> None:
    others = ["urn:example:one", "urn:example:two", "urn:example:three"]

    def order(start: int) -> list[str]:
        place = start % (len(others) + 1)
        return [*others[:place], PLANT, *others[place:]]

    async def scenario() -> tuple[list[float], list[int], list[str]]:
        source = OpcUaSource(settings(peer_starter.endpoint), node_ids(*TAGS))
        delays: list[float] = []
        indices: list[int] = []
        states: list[str] = []

        def note(event: SourceEvent) -> None:
            if isinstance(event, ConnectionChange):
                states.append(event.state)

        peer = await peer_starter.start(order(0))
        try:
            async with source:
                events = source.events()
                for start in range(11):
                    if start:
                        await peer.kill()
                        peer = await peer_starter.start(order(start))
                    indices.append(peer.namespace_index)
                    ready, fresh = time.monotonic(), every_tag_since(now())
                    async with asyncio.timeout(PATIENCE):
                        await until(events, lambda event, fresh=fresh: (note(event), fresh(event))[1])
                    delays.append(time.monotonic() - ready)
        finally:
            await peer.kill()
        return delays, indices, states

    delays, indices, states = asyncio.run(scenario())
    assert all(delay <= RECOVERY_LIMIT for delay in delays), delays
    assert all(first != second for first, second in itertools.pairwise(indices)), indices
    assert states.count("connected") >= 11
    assert states.count("disconnected") >= 10


def test_a_node_that_is_gone_after_a_restart_does_not_stop_the_others(peer_starter: Any) -> None:
    rest = tuple(tag for tag in TAGS if tag != "FAST")

    async def scenario() -> str:
        peer = await peer_starter.start([PLANT])
        try:
            async with OpcUaSource(settings(peer_starter.endpoint), node_ids(*TAGS)) as source:
                events = source.events()
                async with asyncio.timeout(PATIENCE):
                    await until(events, every_tag_since(now()))
                await peer.kill()
                peer = await peer_starter.start([PLANT], without="FAST")
                async with asyncio.timeout(PATIENCE):
                    await until(events, every_tag_since(now(), rest))
                told = source.node_problems["FAST"]
                await peer.kill()
                peer = await peer_starter.start([PLANT])
                async with asyncio.timeout(PATIENCE):
                    await until(events, every_tag_since(now()))
                assert source.node_problems == {}
                return told
        finally:
            await peer.kill()

    assert asyncio.run(scenario()) == f"nsu={PLANT};s=R210.FAST: the server answers BadNodeIdUnknown"


def test_a_node_and_a_namespace_that_do_not_exist_are_named_at_start(peer_starter: Any) -> None:
    nodes = node_ids("GOOD", "NONE") | {"OTHER": "nsu=urn:example:elsewhere;s=R210.GOOD"}

    async def scenario() -> NodeError:
        peer = await peer_starter.start([PLANT])
        try:
            with pytest.raises(NodeError) as caught:
                await OpcUaSource(settings(peer_starter.endpoint), nodes).probe()
        finally:
            await peer.kill()
        return caught.value

    lines = asyncio.run(scenario()).lines
    assert len(lines) == 2
    assert "OTHER: nsu=urn:example:elsewhere;s=R210.GOOD: the server has no namespace" in lines[0]
    assert PLANT in lines[0]
    assert lines[1] == f"NONE: nsu={PLANT};s=R210.NONE: the server answers BadNodeIdUnknown"
