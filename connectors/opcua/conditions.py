"""Fault flags as OPC UA conditions that any client can see, comment on and acknowledge.

A flag is a condition of InstrumentDiagnosticAlarmType ("a fault in a field device") in the class of maintenance
matters. It is *active* from being raised until it is cleared; it is *retained*, and so shown by ConditionRefresh, while
it is active or not yet acknowledged. Every change is one event of the Server object with an event id of its own;
Acknowledge and AddComment must name the newest one.

Source: OPC UA Part 9, 5.5 (ConditionType), 5.7 (AcknowledgeableConditionType), 5.8 (AlarmConditionType).
"""

from __future__ import annotations

import uuid
from collections.abc import Awaitable, Callable
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Literal

from asyncua import Server, ua
from asyncua.common.event_objects import InstrumentDiagnosticAlarm

from connectors.opcua.conversion import to_datetime


@dataclass(frozen=True, slots=True)
class FlagCondition:
    """A flag as a condition.

    :param flag: the flag's own identifier, unique for ever.
    :param unit: the plant unit, :param tag: the sensor (or path) that is believed faulty.
    :param message: one plain sentence.
    :param severity: 1 to 1000 (Part 5, 6.4.2); flags are maintenance matters, so the default is low.
    :param time: UTC microseconds when it was detected.
    """

    flag: str
    unit: str
    tag: str
    message: str
    time: int
    severity: int = 200


@dataclass(frozen=True, slots=True)
class FlagAction:
    """What a client did with a flag; ``comment`` may be empty."""

    flag: str
    action: Literal["acknowledge", "comment"]
    comment: str


OnAction = Callable[[FlagAction], Awaitable[None]]


@dataclass(frozen=True, slots=True)
class _State:
    condition: FlagCondition
    node: ua.NodeId
    event_id: bytes
    active: bool = True
    acknowledged: bool = False
    comment: str = ""
    comment_time: datetime | None = None

    @property
    def retained(self) -> bool:
        return self.active or not self.acknowledged


def allow_conditions(server: Server) -> None:
    """Have ConditionRefresh answered; to be called before the server's own set-up (``init``)."""
    server.iserver.bind_condition_methods = True


class FlagConditions:
    """The conditions of one server.

    :param on_action: told first of what a client does; when it fails, so does the client's call, and nothing
        changes.
    :param now: UTC microseconds on the plant's clock.
    """

    def __init__(self, server: Server, index: int, on_action: OnAction, now: Callable[[], int]) -> None:
        self._now = now
        self._server = server
        self._index = index
        self._on_action = on_action
        self._states: dict[ua.NodeId, _State] = {}

    async def set_up(self) -> None:
        """Let clients subscribe to events of the Server object, and call Acknowledge and AddComment."""
        node = self._server.get_node(ua.NodeId(ua.ObjectIds.Server))
        await node.set_event_notifier([ua.EventNotifier.SubscribeToEvents])
        session = self._server.iserver.isession
        ids = ua.ObjectIds
        session.add_method_callback(
            ua.NodeId(ids.AcknowledgeableConditionType_Acknowledge), self._acknowledge_called
        )
        session.add_method_callback(ua.NodeId(ids.ConditionType_AddComment), self._comment_called)

    async def raise_flag(self, folder: ua.NodeId, condition: FlagCondition) -> None:
        """Show a new flag, with a node of its own below ``folder`` while it is retained."""
        node_id = self._node_id(condition.flag, condition.unit)
        await self._server.get_node(folder).add_object(node_id, ua.QualifiedName(condition.flag, self._index))
        state = _State(condition, node_id, _new_event_id())
        await self._show(state, condition.time, condition.message)

    async def clear_flag(self, unit: str, flag: str, time: int) -> None:
        """The fault is over: the condition is no longer active."""
        state = self._states.get(self._node_id(flag, unit))
        if state is not None and state.active:
            await self._show(replace(state, active=False), time, f"{state.condition.message} (cleared)")

    async def acknowledge_flag(self, unit: str, flag: str, comment: str, time: int) -> None:
        """Someone acknowledged the flag elsewhere; tell the clients."""
        state = self._states.get(self._node_id(flag, unit))
        if state is not None and not state.acknowledged:
            await self._acknowledge(state, comment, time)

    def _node_id(self, flag: str, unit: str) -> ua.NodeId:
        return ua.NodeId(f"{unit}.Flags.{flag}", self._index)

    async def _acknowledge(self, state: _State, comment: str, time: int) -> None:
        said = _with_comment(state, comment, time)
        await self._show(replace(said, acknowledged=True), time, state.condition.message)

    async def _show(self, state: _State, time: int, message: str) -> None:
        """Take over a state and send it as one event; what is not retained any longer is forgotten after it."""
        state = replace(state, event_id=_new_event_id())
        if state.retained:
            self._states[state.node] = state
        else:
            self._states.pop(state.node, None)
        await self._server.iserver.subscription_service.trigger_event(_event(state, time, message))
        if not state.retained:
            await self._server.delete_nodes([self._server.get_node(state.node)])

    async def _acknowledge_called(
        self, node: ua.NodeId, event_id: ua.Variant, comment: ua.Variant
    ) -> ua.StatusCode:
        state = self._states.get(node)
        refusal = _refusal(state, event_id)
        if state is None or refusal is not None:
            return ua.StatusCode(refusal)
        if state.acknowledged:
            return ua.StatusCode(ua.StatusCodes.BadConditionBranchAlreadyAcked)
        text = _text(comment)
        await self._on_action(FlagAction(state.condition.flag, "acknowledge", text))
        state = self._states.get(node)
        if state is not None and not state.acknowledged:
            await self._acknowledge(state, text, max(self._now(), state.condition.time))
        return ua.StatusCode()

    async def _comment_called(
        self, node: ua.NodeId, event_id: ua.Variant, comment: ua.Variant
    ) -> ua.StatusCode:
        state = self._states.get(node)
        refusal = _refusal(state, event_id)
        if state is None or refusal is not None:
            return ua.StatusCode(refusal)
        text = _text(comment)
        await self._on_action(FlagAction(state.condition.flag, "comment", text))
        state = self._states.get(node)
        if state is not None:
            time = max(self._now(), state.condition.time)
            await self._show(_with_comment(state, text, time), time, state.condition.message)
        return ua.StatusCode()


def _refusal(state: _State | None, event_id: ua.Variant) -> int | None:
    if state is None:
        return int(ua.StatusCodes.BadNodeIdUnknown)
    if event_id.Value != state.event_id:
        return int(ua.StatusCodes.BadEventIdUnknown)
    return None


def _text(comment: ua.Variant) -> str:
    content = comment.Value
    return (content.Text or "") if isinstance(content, ua.LocalizedText) else ""


def _with_comment(state: _State, comment: str, time: int) -> _State:
    """Part 9, 5.5.6: an empty comment leaves the one that is there."""
    return replace(state, comment=comment, comment_time=to_datetime(time)) if comment else state


def _new_event_id() -> bytes:
    return uuid.uuid4().bytes


def _two_states(event: InstrumentDiagnosticAlarm, name: str, value: bool, true: str, false: str) -> None:
    setattr(event, f"{name}/Id", value)
    setattr(event, name, ua.LocalizedText(true if value else false, "en"))


def _event(state: _State, time: int, message: str) -> InstrumentDiagnosticAlarm:
    condition = state.condition
    moment = to_datetime(time)
    event = InstrumentDiagnosticAlarm(message=message, severity=condition.severity)
    event.add_property("NodeId", state.node, ua.VariantType.NodeId)
    event.emitting_node = ua.NodeId(ua.ObjectIds.Server)
    event.EventId = state.event_id
    event.SourceNode = state.node
    event.SourceName = f"{condition.unit} {condition.tag}"
    event.Time = event.ReceiveTime = moment
    event.ConditionClassId = ua.NodeId(ua.ObjectIds.MaintenanceConditionClassType)
    event.ConditionClassName = ua.LocalizedText("MaintenanceConditionClass", "en")
    event.ConditionName = condition.flag
    event.BranchId = ua.NodeId()
    event.Retain = state.retained
    event.Quality = ua.StatusCode()
    event.LastSeverity = condition.severity
    event.Comment = ua.LocalizedText(state.comment)
    setattr(event, "Comment/SourceTimestamp", state.comment_time)
    event.ClientUserId = ""
    event.InputNode = ua.NodeId()
    event.SuppressedOrShelved = False
    _two_states(event, "EnabledState", True, "Enabled", "Disabled")
    _two_states(event, "ActiveState", state.active, "Active", "Inactive")
    _two_states(event, "AckedState", state.acknowledged, "Acknowledged", "Unacknowledged")
    return event
