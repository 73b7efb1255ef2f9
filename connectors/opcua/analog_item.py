"""Variables of AnalogItemType: a number with its engineering unit and its range.

Source: OPC UA Part 8, 5.3.2.3 (AnalogItemType), 5.6.2 (Range), 5.6.4.3 (EUInformation: the UN/CEFACT code's
ASCII bytes as one number, -1 where there is none).
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

from asyncua import Server, ua

UNECE_NAMESPACE = "http://www.opcfoundation.org/UA/units/un/cefact"
NO_UNIT_ID = -1


@dataclass(frozen=True, slots=True)
class EngineeringUnit:
    """A unit as it is shown, and its UN/CEFACT number.

    >>> EngineeringUnit.from_code("degC", "CEL").unit_id
    4408652
    """

    display: str
    unit_id: int = NO_UNIT_ID

    @classmethod
    def from_code(cls, display: str, code: str) -> EngineeringUnit:
        """From a UN/CEFACT common code of up to three characters."""
        return cls(display, int.from_bytes(code.encode("ascii"), "big"))


@dataclass(frozen=True, slots=True)
class AnalogItem:
    """One variable to be made: its string identifier, its browse name, its unit, range and description."""

    identifier: str
    name: str
    unit: EngineeringUnit
    range: tuple[float, float]
    description: str = ""


async def add_folder(server: Server, parent: ua.NodeId, index: int, identifier: str, name: str) -> ua.NodeId:
    """A folder with a string node id; gives that id."""
    node = await server.get_node(parent).add_folder(
        ua.NodeId(identifier, index), ua.QualifiedName(name, index)
    )
    return node.nodeid


async def add_analog_item(server: Server, parent: ua.NodeId, index: int, item: AnalogItem) -> ua.NodeId:
    """A read-only Double of AnalogItemType that waits for its first value; gives its node id."""
    attributes = ua.VariableAttributes()
    attributes.DisplayName = ua.LocalizedText(item.name)
    attributes.Description = ua.LocalizedText(item.description or item.name)
    attributes.DataType = ua.NodeId(ua.ObjectIds.Double)
    attributes.Value = ua.Variant(None, ua.VariantType.Null)
    attributes.ValueRank = ua.ValueRank.Scalar
    attributes.AccessLevel = attributes.UserAccessLevel = ua.AccessLevel.CurrentRead.mask
    attributes.WriteMask = attributes.UserWriteMask = 0
    attributes.Historizing = False
    request = ua.AddNodesItem()
    request.RequestedNewNodeId = ua.NodeId(item.identifier, index)
    request.BrowseName = ua.QualifiedName(item.name, index)
    request.NodeClass = ua.NodeClass.Variable
    request.ParentNodeId = parent
    request.ReferenceTypeId = ua.NodeId(ua.ObjectIds.HasComponent)
    request.TypeDefinition = ua.NodeId(ua.ObjectIds.AnalogItemType)
    request.NodeAttributes = attributes
    (result,) = await server.iserver.isession.add_nodes([request])
    result.StatusCode.check()
    node = server.get_node(result.AddedNodeId)
    await _add_unit_and_range(node, index, item)
    waiting = ua.StatusCode(ua.StatusCodes.BadWaitingForInitialData)
    await server.write_attribute_value(result.AddedNodeId, ua.DataValue(StatusCode=waiting))
    return result.AddedNodeId


async def _add_unit_and_range(node: ua.Node, index: int, item: AnalogItem) -> None:
    low, high = item.range
    unit = ua.EUInformation(
        NamespaceUri=UNECE_NAMESPACE,
        UnitId=item.unit.unit_id,
        DisplayName=ua.LocalizedText(item.unit.display),
        Description=ua.LocalizedText(item.unit.display),
    )
    await node.add_property(
        ua.NodeId(f"{item.identifier}.EURange", index), ua.QualifiedName("EURange", 0), ua.Range(low, high)
    )
    await node.add_property(
        ua.NodeId(f"{item.identifier}.EngineeringUnits", index), ua.QualifiedName("EngineeringUnits", 0), unit
    )


async def add_number_property(
    server: Server, parent: ua.NodeId, index: int, identifier: str, name: str
) -> ua.NodeId:
    """A Double as a property of ``parent``, waiting for its first value; gives its node id."""
    node = await server.get_node(parent).add_property(
        ua.NodeId(identifier, index), ua.QualifiedName(name, index), 0.0, ua.VariantType.Double
    )
    waiting = ua.StatusCode(ua.StatusCodes.BadWaitingForInitialData)
    await server.write_attribute_value(node.nodeid, ua.DataValue(StatusCode=waiting))
    return node.nodeid


async def add_enumeration(server: Server, index: int, name: str, members: type[IntEnum]) -> ua.NodeId:
    """An enumeration data type with its members' names as EnumStrings (Part 3, 8.14); gives its node id."""
    parent = server.get_node(ua.NodeId(ua.ObjectIds.Enumeration))
    node = await parent.add_data_type(ua.NodeId(name, index), ua.QualifiedName(name, index))
    await node.add_property(
        ua.NodeId(f"{name}.EnumStrings", index),
        ua.QualifiedName("EnumStrings", 0),
        [ua.LocalizedText(member.name) for member in members],
    )
    return node.nodeid


async def add_enumerated_variable(
    server: Server, parent: ua.NodeId, node_id: ua.NodeId, name: str, data_type: ua.NodeId
) -> ua.NodeId:
    """A read-only variable of an enumeration, an Int32 on the wire, waiting for its first value."""
    index = node_id.NamespaceIndex
    node = await server.get_node(parent).add_variable(
        node_id, ua.QualifiedName(name, index), 0, ua.VariantType.Int32, data_type
    )
    waiting = ua.StatusCode(ua.StatusCodes.BadWaitingForInitialData)
    await server.write_attribute_value(node.nodeid, ua.DataValue(StatusCode=waiting))
    return node.nodeid
