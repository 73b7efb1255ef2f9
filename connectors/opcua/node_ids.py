"""Node ids as text that carries the namespace's URI: ``nsu=urn:example:plant;s=R210.TI2101A``.

An index into the namespace array may change whenever a server restarts; a URI does not. So a bare index is
refused here, and the index is looked up anew after every connect.

Source: OPC UA Part 6, 5.3.1.10 and 5.3.1.11 (text form of NodeId and ExpandedNodeId; in the URI ``;`` is
written ``%3B`` and ``%`` is written ``%25``).
"""

from __future__ import annotations

import base64
import binascii
import uuid
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from asyncua import ua

from connectors.errors import NodeError

IdentifierType = Literal["i", "s", "g", "b"]
Identifier = int | str | uuid.UUID | bytes

EXPECTED = (
    'expected "nsu=<namespace URI>;<s, i, g or b>=<identifier>", '
    'such as "nsu=urn:example:plant;s=R210.TI2101A"'
)
_LARGEST_NUMBER = 2**32 - 1


@dataclass(frozen=True, slots=True)
class NamespacedNodeId:
    """A node id that holds on every start of its server: namespace URI, kind of identifier, identifier."""

    uri: str
    kind: IdentifierType
    identifier: Identifier

    def __str__(self) -> str:
        uri = self.uri.replace("%", "%25").replace(";", "%3B")
        if isinstance(self.identifier, bytes):
            return f"nsu={uri};b={base64.b64encode(self.identifier).decode('ascii')}"
        return f"nsu={uri};{self.kind}={self.identifier}"

    def resolve(self, namespaces: Sequence[str]) -> ua.NodeId:
        """The node id as a server with this namespace array numbers it.

        :raises NodeError: when the server does not have the namespace.
        """
        try:
            index = namespaces.index(self.uri)
        except ValueError:
            known = ", ".join(namespaces[1:]) or "none of its own"
            raise NodeError(
                f"{self}: the server has no namespace {self.uri!r}; its namespaces are: {known}"
            ) from None
        return ua.NodeId(self.identifier, index, _NODE_ID_TYPES[self.kind])


_NODE_ID_TYPES = {
    "i": ua.NodeIdType.Numeric,
    "s": ua.NodeIdType.String,
    "g": ua.NodeIdType.Guid,
    "b": ua.NodeIdType.ByteString,
}


def parse_node_id(text: str) -> NamespacedNodeId:
    """Read a node id's text form.

    >>> parse_node_id("nsu=urn:example:plant;s=R210.TI2101A")
    NamespacedNodeId(uri='urn:example:plant', kind='s', identifier='R210.TI2101A')

    :raises NodeError: when the text is no node id, or names its namespace by a bare index or not at all.
    """
    namespace, separator, rest = text.strip().partition(";")
    if namespace.startswith("ns="):
        raise NodeError(f"{text!r}: a bare namespace index may change when the server restarts; {EXPECTED}")
    if namespace.startswith("svr="):
        raise NodeError(f"{text!r}: a node on another server cannot be read through this one; {EXPECTED}")
    if not namespace.startswith("nsu="):
        raise NodeError(f"{text!r}: no namespace URI; {EXPECTED}")
    uri = namespace.removeprefix("nsu=").replace("%3B", ";").replace("%3b", ";").replace("%25", "%")
    if not uri:
        raise NodeError(f"{text!r}: the namespace URI is empty; {EXPECTED}")
    kind, equals, identifier = rest.partition("=")
    if not separator or not equals or not identifier:
        raise NodeError(f"{text!r}: no identifier after the namespace; {EXPECTED}")
    if kind == "s":
        return NamespacedNodeId(uri, "s", identifier)
    if kind == "i":
        return NamespacedNodeId(uri, "i", _number(text, identifier))
    if kind == "g":
        return NamespacedNodeId(uri, "g", _guid(text, identifier))
    if kind == "b":
        return NamespacedNodeId(uri, "b", _bytes(text, identifier))
    raise NodeError(f"{text!r}: unknown kind of identifier {kind!r}; {EXPECTED}")


def _number(text: str, identifier: str) -> int:
    if not (identifier.isascii() and identifier.isdigit()) or int(identifier) > _LARGEST_NUMBER:
        raise NodeError(f"{text!r}: {identifier!r} is not a whole number from 0 to {_LARGEST_NUMBER}")
    return int(identifier)


def _guid(text: str, identifier: str) -> uuid.UUID:
    try:
        return uuid.UUID(identifier)
    except ValueError:
        raise NodeError(
            f"{text!r}: {identifier!r} is not a GUID such as 09087e75-8e5e-499b-954f-f2a9603db28a"
        ) from None


def _bytes(text: str, identifier: str) -> bytes:
    try:
        return base64.b64decode(identifier, validate=True)
    except (binascii.Error, ValueError):
        raise NodeError(f"{text!r}: {identifier!r} is not base64") from None
