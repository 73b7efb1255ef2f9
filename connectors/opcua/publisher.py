"""Our own OPC UA server: estimates with their intervals, and the sensors' health.

Under Objects a folder per unit, with string node ids in the namespace ``urn:softsensor``::

    <unit>/Estimates/<tag>    AnalogItemType Double: EngineeringUnits, EURange, source timestamp, status code;
                              properties StandardDeviation, Lower95, Upper95 (Double)
    <unit>/Sensors/<tag>      the sensor's NAMUR NE 107 status as DeviceHealthEnumeration (OPC UA Part 100,
    4.5.4):
                              0 normal, 1 failure, 2 check function, 3 off spec, 4 maintenance required
    <unit>/Flags/<flag>       a fault flag as a condition, while it is retained (see conditions.py)

The node id of an estimate is ``nsu=urn:softsensor;s=<unit>.Estimates.<tag>``. Everything is read-only.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum
from types import TracebackType

from asyncua import Server, ua

from connectors.opcua.analog_item import (
    AnalogItem,
    EngineeringUnit,
    add_analog_item,
    add_enumerated_variable,
    add_enumeration,
    add_folder,
    add_number_property,
)
from connectors.opcua.conditions import FlagAction, FlagCondition, FlagConditions, OnAction
from connectors.opcua.conversion import to_datetime
from connectors.opcua.hosting import OPEN, ServerAccess, make_server, start_server, stop_server

NAMESPACE_URI = "urn:softsensor"
BEYOND = "ProbabilityBeyondTolerance"
_INTERVAL_PROPERTIES = ("StandardDeviation", "Lower95", "Upper95")


class DeviceHealth(IntEnum):
    """DeviceHealthEnumeration of OPC UA for Devices (Part 100, 4.5.4), by NAMUR NE 107."""

    NORMAL = 0
    FAILURE = 1
    CHECK_FUNCTION = 2
    OFF_SPEC = 3
    MAINTENANCE_REQUIRED = 4


@dataclass(frozen=True, slots=True)
class PublishedEstimate:
    """One estimate to be published: its tag, engineering unit and range."""

    tag: str
    unit: EngineeringUnit
    range: tuple[float, float]
    description: str = ""


@dataclass(frozen=True, slots=True)
class PublishedUnit:
    """One plant unit: its name, its estimates, and the tags of its sensors."""

    name: str
    estimates: tuple[PublishedEstimate, ...]
    sensors: tuple[str, ...]


class Publisher:
    """Serves estimates and sensor health; ``units`` is fixed for its life."""

    def __init__(
        self,
        endpoint: str,
        units: Sequence[PublishedUnit],
        access: ServerAccess = OPEN,
        on_flag_action: OnAction | None = None,
    ) -> None:
        """:param on_flag_action: called when a client acknowledges a flag or comments on it."""
        self._on_flag_action = on_flag_action or _nobody_listens
        self._conditions: FlagConditions | None = None
        self._latest = 0
        self.endpoint = endpoint
        self._units = tuple(units)
        self._access = access
        self._server: Server | None = None
        self._nodes: dict[tuple[str, str, str], ua.NodeId] = {}

    async def __aenter__(self) -> Publisher:
        await self.start()
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None
    ) -> None:
        await self.stop()

    async def start(self) -> None:
        """Build the nodes and listen.

        :raises ConnectorError: when the address cannot be had, or needs certificates that are not there.
        """
        server = await make_server(self.endpoint, self._access)
        index = await server.register_namespace(NAMESPACE_URI)
        health_type = await add_enumeration(server, index, "DeviceHealthEnumeration", DeviceHealth)
        for unit in self._units:
            await self._add_unit(server, index, unit, health_type)
        conditions = FlagConditions(server, index, self._on_flag_action, lambda: self._latest)
        await conditions.set_up()
        await start_server(server, self.endpoint)
        self._server, self._conditions = server, conditions

    async def stop(self) -> None:
        """Stop listening; clients see the connection break."""
        if self._server is not None:
            server, self._server, self._conditions = self._server, None, None
            await stop_server(server)

    async def publish_estimate(
        self,
        unit: str,
        tag: str,
        value: float,
        sd: float,
        lower: float,
        upper: float,
        time: int,
        status: int = 0,
    ) -> None:
        """Put out one estimate with its standard deviation and 95 % interval, all of one source time.

        :param value: nan where there is none; the same holds for the other numbers.
        :param time: UTC microseconds since 1970.
        :param status: OPC UA status code, 0 for Good; with a Bad one no number is sent.
        """
        for name, number in zip(_INTERVAL_PROPERTIES, (sd, lower, upper), strict=True):
            await self._write(self._nodes[unit, tag, name], _number(number), time, status)
        await self._write(self._nodes[unit, tag, ""], _number(value), time, status)

    async def publish_sensor_health(
        self, unit: str, tag: str, health: int, time: int, beyond: float = math.nan
    ) -> None:
        """Put out one sensor's health.

        :param health: a :class:`DeviceHealth`, or its number.
        :param beyond: the probability that its bias lies beyond its tolerance.
        """
        await self._write(self._nodes[unit, tag, "beyond"], _number(beyond), time, 0)
        content = ua.Variant(int(DeviceHealth(health)), ua.VariantType.Int32)
        await self._write(self._nodes[unit, tag, "health"], content, time, 0)

    async def raise_flag(self, condition: FlagCondition) -> None:
        """Show a fault flag to every client as an active, unacknowledged condition."""
        await self._flags().raise_flag(self._nodes[condition.unit, "", "flags"], condition)

    async def acknowledge_flag(self, unit: str, flag: str, comment: str, time: int) -> None:
        """Tell clients that a flag was acknowledged elsewhere; one that is no longer shown is passed over."""
        await self._flags().acknowledge_flag(unit, flag, comment, time)

    async def clear_flag(self, unit: str, flag: str, time: int) -> None:
        """Tell clients that a flag's fault is over; one that is no longer shown is passed over."""
        await self._flags().clear_flag(unit, flag, time)

    def _flags(self) -> FlagConditions:
        assert self._conditions is not None, "the publisher is not running"
        return self._conditions

    async def _add_unit(
        self, server: Server, index: int, unit: PublishedUnit, health_type: ua.NodeId
    ) -> None:
        objects = ua.NodeId(ua.ObjectIds.ObjectsFolder)
        top = await add_folder(server, objects, index, unit.name, unit.name)
        estimates = await add_folder(server, top, index, f"{unit.name}.Estimates", "Estimates")
        for estimate in unit.estimates:
            identifier = f"{unit.name}.Estimates.{estimate.tag}"
            item = AnalogItem(identifier, estimate.tag, estimate.unit, estimate.range, estimate.description)
            node = await add_analog_item(server, estimates, index, item)
            self._nodes[unit.name, estimate.tag, ""] = node
            for name in _INTERVAL_PROPERTIES:
                self._nodes[unit.name, estimate.tag, name] = await add_number_property(
                    server, node, index, f"{identifier}.{name}", name
                )
        flags = await add_folder(server, top, index, f"{unit.name}.Flags", "Flags")
        self._nodes[unit.name, "", "flags"] = flags
        sensors = await add_folder(server, top, index, f"{unit.name}.Sensors", "Sensors")
        for tag in unit.sensors:
            identifier = f"{unit.name}.Sensors.{tag}"
            node = await add_enumerated_variable(
                server, sensors, ua.NodeId(identifier, index), tag, health_type
            )
            self._nodes[unit.name, tag, "health"] = node
            self._nodes[unit.name, tag, "beyond"] = await add_number_property(
                server, node, index, f"{identifier}.{BEYOND}", BEYOND
            )

    async def _write(self, node: ua.NodeId, content: ua.Variant, time: int, status: int) -> None:
        assert self._server is not None, "the publisher is not running"
        self._latest = max(self._latest, time)
        moment = to_datetime(time)
        data = ua.DataValue(content, ua.StatusCode(status), SourceTimestamp=moment, ServerTimestamp=moment)
        await self._server.write_attribute_value(node, data)


async def _nobody_listens(action: FlagAction) -> None:
    """A publisher without a listener still keeps the acknowledgement in its conditions."""


def _number(value: float) -> ua.Variant:
    if math.isnan(value):
        return ua.Variant(None, ua.VariantType.Null)
    return ua.Variant(float(value), ua.VariantType.Double)
