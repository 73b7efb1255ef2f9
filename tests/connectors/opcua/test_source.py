"""The source against a server of our own: complete, prompt, and on after every loss."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator

import pytest

from connectors.errors import ConnectorError, NodeError, PlantConnectionError
from connectors.events import ConnectionChange, ReadingsLost, SourceEvent
from connectors.opcua.node_ids import parse_node_id
from connectors.opcua.settings import OpcUaSettings
from connectors.opcua.source import OpcUaSource
from connectors.opcua.tag_server import ServedTag, TagServer
from connectors.readings import Quality, Reading

URI = "urn:example:plant"
START = 1_796_104_800_000_000
CYCLE = 10_000_000
PATIENCE = 120.0
"""Seconds after which a test gives up; a server of ours takes some to load the standard's nodes."""


def settings(endpoint: str) -> OpcUaSettings:
    return OpcUaSettings(endpoint, publishing_interval=0.03)


async def next_reading(events: AsyncIterator[SourceEvent], time: int) -> Reading:
    """The next reading whose source time is at or after ``time``."""
    async for event in events:
        if isinstance(event, Reading) and event.time >= time:
            return event
    raise AssertionError("the source ended")


async def until_connected(events: AsyncIterator[SourceEvent]) -> ConnectionChange:
    async for event in events:
        if isinstance(event, ConnectionChange) and event.state == "connected":
            return event
    raise AssertionError("the source ended")


def test_every_value_of_a_fast_plant_arrives_in_order(endpoint: str, plant_tags: list[ServedTag]) -> None:
    """Bursts of cycles between two publications, time stamps ten seconds apart: nothing is merged or lost."""
    cycles = 200

    async def scenario() -> list[Reading]:
        readings: list[Reading] = []
        async with TagServer(endpoint, URI, plant_tags) as plant:
            source = OpcUaSource(settings(endpoint), plant.node_ids())
            await source.probe()
            async with source, asyncio.timeout(PATIENCE):
                events = source.events()
                await until_connected(events)
                for tag in plant_tags:
                    await plant.write(tag.tag, -1.0, START - CYCLE)
                heard: set[str] = set()
                while len(heard) < len(plant_tags):
                    heard.add((await next_reading(events, START - CYCLE)).tag)
                for cycle in range(cycles):
                    for number, tag in enumerate(plant_tags):
                        await plant.write(tag.tag, cycle + number / 8.0, START + cycle * CYCLE)
                    if cycle % 10 == 9:
                        readings.append(await next_reading(events, START))
                while len(readings) < cycles * len(plant_tags):
                    readings.append(await next_reading(events, START))
        assert asyncio.all_tasks() == {asyncio.current_task()}
        return readings

    readings = asyncio.run(scenario())
    for number, tag in enumerate(plant_tags):
        own = [(r.value, r.time, r.quality) for r in readings if r.tag == tag.tag]
        assert own == [(cycle + number / 8.0, START + cycle * CYCLE, Quality.GOOD) for cycle in range(cycles)]


def test_an_unchanged_value_with_a_new_time_is_a_new_reading(
    endpoint: str, plant_tags: list[ServedTag]
) -> None:
    async def scenario() -> list[tuple[float, int]]:
        async with TagServer(endpoint, URI, plant_tags[:1]) as plant:
            await plant.write("TI2101", 92.4, START)
            async with OpcUaSource(settings(endpoint), plant.node_ids()) as source, asyncio.timeout(PATIENCE):
                events = source.events()
                seen = [await next_reading(events, START)]
                for step in (1, 2, 3):
                    await plant.write("TI2101", 92.4, START + step)
                    seen.append(await next_reading(events, START))
        return [(reading.value, reading.time) for reading in seen]

    assert asyncio.run(scenario()) == [(92.4, START + step) for step in range(4)]


def test_status_codes_pass_unchanged(endpoint: str, plant_tags: list[ServedTag]) -> None:
    codes = [0x40930000, 0x808C0600, 0x00000500, 0x808B0000, 0x408F0000, 0x00960000]

    async def scenario() -> list[int]:
        async with TagServer(endpoint, URI, plant_tags[:1]) as plant:
            await plant.write("TI2101", 1.0, START)
            async with OpcUaSource(settings(endpoint), plant.node_ids()) as source, asyncio.timeout(PATIENCE):
                events = source.events()
                await next_reading(events, START)
                for step, code in enumerate(codes):
                    await plant.write("TI2101", 1.0, START + 1 + step, code)
                return [(await next_reading(events, START + 1)).status for _ in codes]

    assert asyncio.run(scenario()) == codes


def test_readings_go_on_after_the_server_restarts_on_the_same_port(
    endpoint: str, plant_tags: list[ServedTag]
) -> None:
    async def scenario() -> list[ConnectionChange]:
        changes: list[ConnectionChange] = []
        plant = TagServer(endpoint, URI, plant_tags)
        await plant.start()
        async with OpcUaSource(settings(endpoint), plant.node_ids()) as source, asyncio.timeout(PATIENCE):
            events = source.events()
            for start in range(3):
                changes.append(await until_connected(events))
                await plant.write("TI2101", float(start), START + start)
                assert (await next_reading(events, START + start)).value == float(start)
                await plant.stop()
                async for event in events:
                    if isinstance(event, ConnectionChange):
                        changes.append(event)
                        break
                plant = TagServer(endpoint, URI, plant_tags)
                await plant.start()
            await until_connected(events)
        await plant.stop()
        assert asyncio.all_tasks() == {asyncio.current_task()}
        return changes

    changes = asyncio.run(scenario())
    assert [change.state for change in changes] == ["connected", "disconnected"] * 3
    assert changes[0].reason == f"{endpoint}: reading 8 of 8 tags"


def test_a_slow_reader_loses_the_oldest_and_is_told_how_many(
    endpoint: str, plant_tags: list[ServedTag]
) -> None:
    async def scenario() -> tuple[int, list[Reading]]:
        lost, kept = 0, []
        async with TagServer(endpoint, URI, plant_tags[:1]) as plant:
            source = OpcUaSource(settings(endpoint), plant.node_ids(), queue_size=10)
            async with source, asyncio.timeout(PATIENCE):
                events = source.events()
                await until_connected(events)
                await plant.write("TI2101", 0.0, START)
                await next_reading(events, START)
                async with OpcUaSource(settings(endpoint), plant.node_ids()) as witness:
                    seen = witness.events()
                    await next_reading(seen, START)
                    for step in range(1, 61):
                        await plant.write("TI2101", float(step), START + step)
                    while (await next_reading(seen, START)).value < 60.0:
                        pass
                async for event in events:
                    if isinstance(event, ReadingsLost):
                        lost += event.count
                    elif isinstance(event, Reading):
                        kept.append(event)
                        if event.value == 60.0:
                            break
        return lost, kept

    lost, kept = asyncio.run(scenario())
    assert lost + len(kept) == 60
    assert lost > 0
    values = [reading.value for reading in kept]
    assert values == sorted(values)


def test_an_endpoint_that_refuses_is_named(endpoint: str) -> None:
    nodes = {"TI2101": f"nsu={URI};s=R-210.TI2101"}
    with pytest.raises(PlantConnectionError) as caught:
        asyncio.run(OpcUaSource(settings(endpoint), nodes).probe())
    assert (
        str(caught.value) == f"{endpoint}: connection refused; is the server running, and is this its port?"
    )


def test_a_server_that_comes_later_is_waited_for(endpoint: str, plant_tags: list[ServedTag]) -> None:
    async def scenario() -> list[SourceEvent]:
        plant = TagServer(endpoint, URI, plant_tags)
        async with OpcUaSource(settings(endpoint), plant.node_ids()) as source, asyncio.timeout(PATIENCE):
            events = source.events()
            first = await anext(events)
            async with plant:
                second = await anext(events)
        return [first, second]

    refused, connected = asyncio.run(scenario())
    assert isinstance(refused, ConnectionChange)
    assert refused.state == "disconnected"
    assert "connection refused" in refused.reason
    assert isinstance(connected, ConnectionChange)
    assert connected.state == "connected"


def test_a_missing_node_ends_a_strict_source_and_not_another(
    endpoint: str, plant_tags: list[ServedTag]
) -> None:
    gone = f"nsu={URI};s=R-210.TI9999"

    async def scenario() -> tuple[NodeError, ConnectionChange, Reading, str]:
        async with TagServer(endpoint, URI, plant_tags) as plant, asyncio.timeout(PATIENCE):
            nodes = plant.node_ids() | {"TI9999": gone}
            async with OpcUaSource(settings(endpoint), nodes) as source:
                with pytest.raises(NodeError) as caught:
                    await until_connected(source.events())
            async with OpcUaSource(settings(endpoint), nodes, strict=False) as source:
                events = source.events()
                change = await until_connected(events)
                await plant.write("TI2101", 1.0, START)
                reading = await next_reading(events, START)
                return caught.value, change, reading, source.node_problems["TI9999"]

    error, change, reading, problem = asyncio.run(scenario())
    assert error.lines == (f"TI9999: {gone}: the server answers BadNodeIdUnknown",)
    assert change.reason == f"{endpoint}: reading 8 of 9 tags; TI9999: {problem}"
    assert reading.value == 1.0


def test_a_node_that_is_no_variable_is_named(endpoint: str, plant_tags: list[ServedTag]) -> None:
    async def scenario() -> NodeError:
        async with TagServer(endpoint, URI, plant_tags):
            with pytest.raises(NodeError) as caught:
                await OpcUaSource(settings(endpoint), {"TI": f"nsu={URI};s=R-210"}).probe()
            return caught.value

    assert str(asyncio.run(scenario())) == f"TI: nsu={URI};s=R-210: not a variable, so it has no value"


def test_node_ids_that_do_not_parse_are_all_told_with_their_tags(endpoint: str) -> None:
    with pytest.raises(NodeError) as caught:
        OpcUaSource(settings(endpoint), {"A": "ns=2;s=x", "B": "nsu=urn:x;s=y", "C": "z"})
    assert [line.split(":")[0] for line in caught.value.lines] == ["A", "C"]


def test_a_node_without_history_gives_an_empty_one(endpoint: str, plant_tags: list[ServedTag]) -> None:
    async def scenario() -> list[Reading]:
        plant = TagServer(endpoint, URI, plant_tags)
        source = OpcUaSource(settings(endpoint), plant.node_ids())
        async with plant, source, asyncio.timeout(PATIENCE):
            events = source.events()
            await until_connected(events)
            await plant.write("TI2101", 1.0, START)
            await next_reading(events, START)
            return await source.read_history("TI2101", START - CYCLE, START + CYCLE)

    assert asyncio.run(scenario()) == []


def test_history_that_the_server_kept_is_read_once_each_in_order(
    endpoint: str, plant_tags: list[ServedTag]
) -> None:
    async def scenario() -> list[Reading]:
        plant = TagServer(endpoint, URI, plant_tags)
        source = OpcUaSource(settings(endpoint), plant.node_ids())
        async with plant, source, asyncio.timeout(PATIENCE):
            assert plant.library_server is not None
            node = plant.library_server.get_node(
                parse_node_id(plant.node_id("TI2101")).resolve(["", "", URI])
            )
            await plant.write("TI2101", -1.0, START - 1)
            await plant.library_server.iserver.enable_history_data_change(node, period=None)
            events = source.events()
            await until_connected(events)
            for step in range(8):
                await plant.write("TI2101", float(step), START + step, 0x40930000 if step == 3 else 0)
            await plant.write("TI2101", 7.0, START + 7)
            while (await next_reading(events, START)).value < 7.0:
                pass
            return await source.read_history("TI2101", START + 2, START + 7)

    readings = asyncio.run(scenario())
    assert [(reading.value, reading.time - START) for reading in readings] == [
        (float(step), step) for step in range(2, 8)
    ]
    assert [reading.quality for reading in readings].count(Quality.UNCERTAIN) == 1


def test_after_a_loss_what_the_server_kept_meanwhile_comes_too(
    endpoint: str, plant_tags: list[ServedTag]
) -> None:
    """Of a node with history; of one without it only the present value comes."""

    async def scenario() -> tuple[list[Reading], list[str]]:
        plant, told, heard = TagServer(endpoint, URI, plant_tags[:2]), [], []
        source = OpcUaSource(settings(endpoint), plant.node_ids())
        async with plant, source, asyncio.timeout(PATIENCE):
            assert plant.library_server is not None
            node = plant.library_server.get_node(
                parse_node_id(plant.node_id(plant_tags[0].tag)).resolve(["", "", URI])
            )
            for tag in plant_tags[:2]:
                await plant.write(tag.tag, -1.0, START - 1)
            await plant.library_server.iserver.enable_history_data_change(node, period=None)
            events = source.events()
            await until_connected(events)
            heard_of: set[str] = set()
            while len(heard_of) < 2:
                heard_of.add((await next_reading(events, START - 1)).tag)
            server = plant.library_server.bserver
            assert server is not None
            for client in list(server.clients):
                assert client.transport is not None
                client.transport.close()
            for step in range(6):
                for tag in plant_tags[:2]:
                    await plant.write(tag.tag, float(step), START + step)
            async for event in events:
                if isinstance(event, Reading):
                    heard.append(event)
                elif isinstance(event, ConnectionChange):
                    told.append(event.reason)
                    if "had kept" in event.reason:
                        break
        return heard, told

    heard, told = asyncio.run(scenario())
    with_history = {
        reading.time - START: reading.value for reading in heard if reading.tag == plant_tags[0].tag
    }
    assert with_history == {step: float(step) for step in range(6)}
    without = {reading.time - START for reading in heard if reading.tag == plant_tags[1].tag}
    assert without <= {5}
    assert told[-1] == f"{endpoint}: taken what the server had kept: 6 readings, of 1 of 2 tags"


def test_a_port_that_is_taken_is_named(endpoint: str, plant_tags: list[ServedTag]) -> None:
    async def scenario() -> None:
        async with TagServer(endpoint, URI, plant_tags[:1]):
            with pytest.raises(ConnectorError, match=f"{endpoint}: cannot listen there"):
                await TagServer(endpoint, URI, plant_tags[:1]).start()

    asyncio.run(scenario())
