"""Our own server as a client sees it: the tree, the types, the numbers, and that nobody can write."""

from __future__ import annotations

import asyncio
import math
from typing import Any

import pytest
from asyncua import Client, ua

from connectors.opcua.analog_item import EngineeringUnit
from connectors.opcua.conversion import to_datetime
from connectors.opcua.publisher import NAMESPACE_URI, PublishedEstimate, PublishedUnit, Publisher

TIME = 1_796_104_800_123_456
UNIT = PublishedUnit(
    "R-210",
    (PublishedEstimate("AY2101", EngineeringUnit.from_code("mol/m3", "C36"), (0.0, 4000.0), "reactant"),),
    ("TI2101A", "TI2101B"),
)


async def child(client: Client, *names: str) -> Any:
    index = await client.get_namespace_index(NAMESPACE_URI)
    return await client.nodes.objects.get_child([f"{index}:{name}" for name in names])


def test_an_estimate_is_an_analog_item_with_its_interval(endpoint: str) -> None:
    async def scenario() -> dict[str, Any]:
        seen: dict[str, Any] = {}
        async with Publisher(endpoint, [UNIT]) as publisher:
            await publisher.publish_estimate("R-210", "AY2101", 1.32, 0.02, 1.28, 1.36, TIME, 0x40910000)
            async with Client(endpoint) as client:
                node = await child(client, "R-210", "Estimates", "AY2101")
                seen["type"] = await node.read_type_definition()
                seen["data"] = await node.read_data_value(raise_on_bad_status=False)
                for item in await node.get_properties():
                    seen[(await item.read_browse_name()).Name] = await item.read_data_value(
                        raise_on_bad_status=False
                    )
        return seen

    seen = asyncio.run(scenario())
    # READ (OPC UA Part 8, references 5.3): AnalogItemType is i=2368; unitId of C36 (mol/m3) is 4404022.
    assert seen["type"] == ua.NodeId(2368)
    assert seen["data"].Value.Value == 1.32
    assert seen["data"].StatusCode.value == 0x40910000
    assert seen["data"].SourceTimestamp == to_datetime(TIME)
    assert seen["EngineeringUnits"].Value.Value.UnitId == 4404022
    assert seen["EngineeringUnits"].Value.Value.DisplayName.Text == "mol/m3"
    assert (seen["EURange"].Value.Value.Low, seen["EURange"].Value.Value.High) == (0.0, 4000.0)
    for name, number in (("StandardDeviation", 0.02), ("Lower95", 1.28), ("Upper95", 1.36)):
        assert seen[name].Value.Value == number
        assert seen[name].SourceTimestamp == to_datetime(TIME)
        assert seen[name].StatusCode.value == 0x40910000


def test_sensor_health_is_the_enumeration_of_devices(endpoint: str) -> None:
    async def scenario() -> tuple[Any, Any, Any, list[str]]:
        async with Publisher(endpoint, [UNIT]) as publisher:
            await publisher.publish_sensor_health("R-210", "TI2101A", 3, TIME)
            with pytest.raises(ValueError, match="5 is not a valid DeviceHealth"):
                await publisher.publish_sensor_health("R-210", "TI2101A", 5, TIME)
            async with Client(endpoint) as client:
                told = await (await child(client, "R-210", "Sensors", "TI2101A")).read_data_value()
                untold_node = await child(client, "R-210", "Sensors", "TI2101B")
                untold = await untold_node.read_data_value(raise_on_bad_status=False)
                data_type = client.get_node(await untold_node.read_data_type())
                strings = await (await data_type.get_child("0:EnumStrings")).read_value()
                name = await data_type.read_browse_name()
        return told, untold, name, [text.Text for text in strings]

    told, untold, name, strings = asyncio.run(scenario())
    assert (told.Value.Value, told.Value.VariantType) == (3, ua.VariantType.Int32)
    assert told.SourceTimestamp == to_datetime(TIME)
    assert untold.StatusCode.value == 0x80320000  # BadWaitingForInitialData, READ (Part 6)
    assert name.Name == "DeviceHealthEnumeration"
    # READ (OPC UA Part 100, references 5.2)
    assert strings == ["NORMAL", "FAILURE", "CHECK_FUNCTION", "OFF_SPEC", "MAINTENANCE_REQUIRED"]


def test_a_bad_estimate_has_no_number_and_may_be_good_again(endpoint: str) -> None:
    async def scenario() -> list[tuple[Any, int]]:
        seen: list[tuple[Any, int]] = []
        async with Publisher(endpoint, [UNIT]) as publisher, Client(endpoint) as client:
            node = await child(client, "R-210", "Estimates", "AY2101")
            for value, status in ((math.nan, 0x809B0000), (1.5, 0), (2.5, 0x809B0000), (3.5, 0)):
                await publisher.publish_estimate("R-210", "AY2101", value, 0.1, 1.0, 2.0, TIME, status)
                data = await node.read_data_value(raise_on_bad_status=False)
                seen.append((data.Value.Value, data.StatusCode.value))
        return seen

    assert asyncio.run(scenario()) == [(None, 0x809B0000), (1.5, 0), (None, 0x809B0000), (3.5, 0)]


def test_nobody_writes_to_it_and_a_lost_message_is_not_made_up(endpoint: str) -> None:
    async def scenario() -> None:
        async with Publisher(endpoint, [UNIT]), Client(endpoint) as client:
            node = await child(client, "R-210", "Estimates", "AY2101")
            with pytest.raises(ua.UaStatusCodeError):
                await node.write_value(1.0)
            with pytest.raises(ua.uaerrors.BadSubscriptionIdInvalid):
                await client.uaclient.session.republish(4711, 1)
            subscription = await client.create_subscription(100, None)
            with pytest.raises(ua.uaerrors.BadMessageNotAvailable):
                await client.uaclient.session.republish(subscription.subscription_id, 4711)
            await subscription.delete()

    asyncio.run(scenario())
