"""A small plant-side server: what the demo's simulated plant and the tests stand behind.

Variables of AnalogItemType in a folder per unit, with string node ids, source timestamps on the plant's clock
and status codes as the plant gives them. A laboratory's tag is a tag like others whose source timestamp is
the time of sampling.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from types import TracebackType

from asyncua import Server, ua

from connectors.opcua.analog_item import AnalogItem, EngineeringUnit, add_analog_item, add_folder
from connectors.opcua.conversion import to_datetime
from connectors.opcua.hosting import OPEN, ServerAccess, make_server, start_server, stop_server
from connectors.opcua.node_ids import NamespacedNodeId


@dataclass(frozen=True, slots=True)
class ServedTag:
    """One tag of a plant.

    :param tag: its name, also the last part of its node id.
    :param folder: the plant unit that it belongs to.
    :param unit: engineering unit.
    :param range: instrument range.
    """

    tag: str
    folder: str
    unit: EngineeringUnit
    range: tuple[float, float]
    description: str = ""

    @property
    def identifier(self) -> str:
        return f"{self.folder}.{self.tag}"


class TagServer:
    """Serves tags over OPC UA; values are handed in with :meth:`write`.

    ::

        async with TagServer("opc.tcp://127.0.0.1:4840", "urn:example:plant", tags) as plant:
            await plant.write("TI2101A", 92.4, source_time=time)
    """

    def __init__(
        self, endpoint: str, namespace_uri: str, tags: Sequence[ServedTag], access: ServerAccess = OPEN
    ) -> None:
        self.endpoint = endpoint
        self._namespace_uri = namespace_uri
        self._tags = {tag.tag: tag for tag in tags}
        self._access = access
        self._server: Server | None = None
        self._nodes: dict[str, ua.NodeId] = {}

    async def __aenter__(self) -> TagServer:
        await self.start()
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None
    ) -> None:
        await self.stop()

    @property
    def library_server(self) -> Server | None:
        """The library's server while it runs, for what this small one does not offer, such as history."""
        return self._server

    def node_id(self, tag: str) -> str:
        """The tag's node id as a site file has it."""
        return str(NamespacedNodeId(self._namespace_uri, "s", self._tags[tag].identifier))

    def node_ids(self) -> dict[str, str]:
        """Every tag's node id as a site file has it."""
        return {tag: self.node_id(tag) for tag in self._tags}

    async def start(self) -> None:
        """Build the nodes and listen.

        :raises ConnectorError: when the address cannot be had.
        """
        server = await make_server(self.endpoint, self._access, "plant")
        index = await server.register_namespace(self._namespace_uri)
        objects = ua.NodeId(ua.ObjectIds.ObjectsFolder)
        folders: dict[str, ua.NodeId] = {}
        for tag in self._tags.values():
            if tag.folder not in folders:
                folders[tag.folder] = await add_folder(server, objects, index, tag.folder, tag.folder)
            item = AnalogItem(tag.identifier, tag.tag, tag.unit, tag.range, tag.description)
            self._nodes[tag.tag] = await add_analog_item(server, folders[tag.folder], index, item)
        await start_server(server, self.endpoint)
        self._server = server

    async def stop(self) -> None:
        """Stop listening; clients see the connection break."""
        if self._server is not None:
            server, self._server = self._server, None
            await stop_server(server)

    async def write(self, tag: str, value: float, source_time: int, status: int = 0) -> None:
        """Put one value out, to be seen by every subscriber at its next publication.

        :param value: nan for none: subscribers then see no value.
        :param source_time: UTC microseconds since 1970, on the plant's clock.
        :param status: OPC UA status code; with a Bad one the value is not sent (Part 4, 7.11).
        """
        assert self._server is not None, "the server is not running"
        content = (
            ua.Variant(None, ua.VariantType.Null)
            if math.isnan(value)
            else ua.Variant(float(value), ua.VariantType.Double)
        )
        moment = to_datetime(source_time)
        data = ua.DataValue(content, ua.StatusCode(status), SourceTimestamp=moment, ServerTimestamp=moment)
        await self._server.write_attribute_value(self._nodes[tag], data)
