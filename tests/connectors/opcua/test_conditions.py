"""Flags as Part 9 conditions, as a client of another make sees them: shown, acknowledged, commented on, refreshed."""

from __future__ import annotations

import asyncio
from typing import Any

import pytest
from asyncua import Client, ua

from connectors.opcua.conditions import FlagAction, FlagCondition
from connectors.opcua.conversion import to_datetime
from connectors.opcua.publisher import PublishedUnit, Publisher

TIME = 1_796_104_800_000_000
UNIT = PublishedUnit("R-210", (), ("TI2101A",))
FLAG = FlagCondition("F-17", "R-210", "TI2101A", "TI2101A drifts upwards", TIME)
# READ (references 5.3 and the standard's node ids): the methods and the type
ACKNOWLEDGE, ADD_COMMENT, REFRESH = ua.NodeId(9111), ua.NodeId(9029), ua.NodeId(3875)
INSTRUMENT_DIAGNOSTIC_ALARM = ua.NodeId(18347)
PATIENCE = 120.0


class Watcher:
    """A client's view: the events of the server object, as they come."""

    def __init__(self, client: Client) -> None:
        self._client = client

    async def start(self) -> None:
        self.subscription = await self._client.create_subscription(20, None, queue_maxsize=1000)
        alarm_type = ua.NodeId(ua.ObjectIds.AlarmConditionType)
        event_filter = ua.EventFilter(
            SelectClauses=[_select(alarm_type, *path) for path in FIELDS]
            + [
                ua.SimpleAttributeOperand(
                    TypeDefinitionId=ua.NodeId(ua.ObjectIds.ConditionType), AttributeId=ua.AttributeIds.NodeId
                )
            ]
        )
        await self.subscription.subscribe_events(evfilter=event_filter)

    async def next(self) -> Any:
        """The next event that is a condition's."""
        async with asyncio.timeout(PATIENCE):
            while True:
                event = (await anext(self.subscription)).event
                if event.EventType == INSTRUMENT_DIAGNOSTIC_ALARM:
                    return event

    async def call(self, event: Any, method: ua.NodeId, comment: str) -> None:
        await self._client.get_node(event.NodeId).call_method(
            method, event.EventId, ua.LocalizedText(comment)
        )

    async def refresh(self) -> None:
        await self._client.get_node(ua.NodeId(ua.ObjectIds.ConditionType)).call_method(
            REFRESH, ua.Variant(self.subscription.subscription_id, ua.VariantType.UInt32)
        )


FIELDS = [
    ("EventId",),
    ("EventType",),
    ("Time",),
    ("Message",),
    ("Severity",),
    ("SourceName",),
    ("ConditionName",),
    ("Retain",),
    ("Comment",),
    ("ActiveState", "Id"),
    ("AckedState", "Id"),
]


def _select(event_type: ua.NodeId, *path: str) -> ua.SimpleAttributeOperand:
    return ua.SimpleAttributeOperand(
        TypeDefinitionId=event_type,
        BrowsePath=[ua.QualifiedName(name, 0) for name in path],
        AttributeId=ua.AttributeIds.Value,
    )


def states(event: Any) -> tuple[bool, bool, bool]:
    """Active, acknowledged, retained."""
    return getattr(event, "ActiveState/Id"), getattr(event, "AckedState/Id"), event.Retain


def test_a_flag_is_seen_commented_on_acknowledged_and_cleared(endpoint: str) -> None:
    actions: list[FlagAction] = []

    async def note(action: FlagAction) -> None:
        actions.append(action)

    async def scenario() -> list[Any]:
        async with Publisher(endpoint, [UNIT], on_flag_action=note) as publisher, Client(endpoint) as client:
            watcher = Watcher(client)
            await watcher.start()
            await publisher.raise_flag(FLAG)
            events = [await watcher.next()]
            await watcher.call(events[-1], ADD_COMMENT, "looked at it")
            events.append(await watcher.next())
            with pytest.raises(ua.uaerrors.BadEventIdUnknown):
                await watcher.call(events[0], ACKNOWLEDGE, "")
            await watcher.call(events[-1], ACKNOWLEDGE, "")
            events.append(await watcher.next())
            with pytest.raises(ua.uaerrors.BadConditionBranchAlreadyAcked):
                await watcher.call(events[-1], ACKNOWLEDGE, "")
            await publisher.clear_flag("R-210", "F-17", TIME + 1_000_000)
            events.append(await watcher.next())
            with pytest.raises(ua.uaerrors.BadNodeIdInvalid):
                await watcher.call(events[-1], ADD_COMMENT, "too late")
        return events

    raised, commented, acknowledged, cleared = asyncio.run(scenario())
    assert raised.ConditionName == "F-17"
    assert raised.SourceName == "R-210 TI2101A"
    assert raised.Message.Text == "TI2101A drifts upwards"
    assert (raised.Severity, raised.Time) == (200, to_datetime(TIME))
    assert [states(event) for event in (raised, commented, acknowledged, cleared)] == [
        (True, False, True),
        (True, False, True),
        (True, True, True),
        (False, True, False),
    ]
    assert commented.Comment.Text == acknowledged.Comment.Text == "looked at it"
    assert len({event.EventId for event in (raised, commented, acknowledged, cleared)}) == 4
    assert actions == [FlagAction("F-17", "comment", "looked at it"), FlagAction("F-17", "acknowledge", "")]


def test_an_acknowledgement_that_cannot_be_recorded_does_not_count(endpoint: str) -> None:
    async def refuse(action: FlagAction) -> None:
        raise OSError("the disk is full")

    async def scenario() -> Any:
        async with (
            Publisher(endpoint, [UNIT], on_flag_action=refuse) as publisher,
            Client(endpoint) as client,
        ):
            watcher = Watcher(client)
            await watcher.start()
            await publisher.raise_flag(FLAG)
            raised = await watcher.next()
            with pytest.raises(ua.uaerrors.BadUnexpectedError):
                await watcher.call(raised, ACKNOWLEDGE, "")
            await publisher.clear_flag("R-210", "F-17", TIME)
            return await watcher.next()

    assert states(asyncio.run(scenario())) == (False, False, True)


def test_an_acknowledgement_carries_the_plants_present_time(endpoint: str) -> None:
    async def scenario() -> Any:
        async with Publisher(endpoint, [UNIT]) as publisher, Client(endpoint) as client:
            watcher = Watcher(client)
            await watcher.start()
            await publisher.raise_flag(FLAG)
            await publisher.publish_sensor_health("R-210", "TI2101A", 4, TIME + 5_000_000)
            await watcher.call(await watcher.next(), ACKNOWLEDGE, "seen")
            return await watcher.next()

    assert asyncio.run(scenario()).Time == to_datetime(TIME + 5_000_000)


def test_a_client_that_comes_later_is_told_what_is_retained(endpoint: str) -> None:
    async def scenario() -> list[Any]:
        async with Publisher(endpoint, [UNIT]) as publisher, Client(endpoint) as client:
            for number in (1, 2, 3):
                flag = FlagCondition(f"F-{number}", "R-210", "TI2101A", f"flag {number}", TIME)
                await publisher.raise_flag(flag)
            await publisher.acknowledge_flag("R-210", "F-1", "seen on the page", TIME)
            await publisher.clear_flag("R-210", "F-1", TIME)
            await publisher.clear_flag("R-210", "F-2", TIME)
            await publisher.clear_flag("R-210", "F-2", TIME)
            watcher = Watcher(client)
            await watcher.start()
            await watcher.refresh()
            return [await watcher.next(), await watcher.next()]

    told = {event.ConditionName: states(event) for event in asyncio.run(scenario())}
    assert told == {"F-2": (False, False, True), "F-3": (True, False, True)}
