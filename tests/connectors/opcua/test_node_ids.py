"""Node ids in text form (OPC UA Part 6, 5.3.1.10 and 5.3.1.11; its own examples where the standard gives one)."""

from __future__ import annotations

import uuid

import pytest
from asyncua import ua
from hypothesis import given
from hypothesis import strategies as st

from connectors.errors import NodeError
from connectors.opcua.node_ids import NamespacedNodeId, parse_node_id

NAMESPACES = ["http://opcfoundation.org/UA/", "urn:server", "urn:other", "urn:example:plant"]


@pytest.mark.parametrize(
    ("text", "identifier", "kind"),
    [
        ("nsu=urn:example:plant;s=R210.TI2101A", "R210.TI2101A", ua.NodeIdType.String),
        ("nsu=urn:example:plant;s=a;b=c d", "a;b=c d", ua.NodeIdType.String),
        ("nsu=urn:example:plant;i=13", 13, ua.NodeIdType.Numeric),
        ("nsu=urn:example:plant;i=4294967295", 4294967295, ua.NodeIdType.Numeric),
        # identifiers of the examples in Part 6, 5.3.1.10: a GUID and a byte string (MEMORY)
        (
            "nsu=urn:example:plant;g=09087e75-8e5e-499b-954f-f2a9603db28a",
            uuid.UUID("09087e75-8e5e-499b-954f-f2a9603db28a"),
            ua.NodeIdType.Guid,
        ),
        ("nsu=urn:example:plant;b=M/RbKBsRVkePCePcx24oRA==", None, ua.NodeIdType.ByteString),
    ],
)
def test_every_kind_of_identifier_resolves_by_uri(text: str, identifier: object, kind: ua.NodeIdType) -> None:
    node = parse_node_id(text).resolve(NAMESPACES)
    assert node.NamespaceIndex == 3
    assert node.NodeIdType is kind
    if identifier is not None:
        assert node.Identifier == identifier
    assert parse_node_id(text).resolve(NAMESPACES[::-1]).NamespaceIndex == 0


def test_bytes_are_decoded() -> None:
    identifier = parse_node_id("nsu=urn:x;b=M/RbKBsRVkePCePcx24oRA==").identifier
    assert identifier == bytes.fromhex("33F45B281B1156478F09E3DCC76E2844")


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("ns=2;s=R210.TI2101A", "a bare namespace index may change"),
        ("i=85", "no namespace URI"),
        ("R210.TI2101A", "no namespace URI"),
        ("", "no namespace URI"),
        ("svr=1;nsu=urn:x;i=1", "another server"),
        ("nsu=;i=1", "the namespace URI is empty"),
        ("nsu=urn:x", "no identifier"),
        ("nsu=urn:x;", "no identifier"),
        ("nsu=urn:x;s=", "no identifier"),
        ("nsu=urn:x;q=1", "unknown kind of identifier 'q'"),
        ("nsu=urn:x;i=-1", "not a whole number"),
        ("nsu=urn:x;i=4294967296", "not a whole number"),
        ("nsu=urn:x;i=1.5", "not a whole number"),
        ("nsu=urn:x;g=123", "not a GUID"),
        ("nsu=urn:x;b=%%%", "not base64"),
    ],
)
def test_what_is_no_node_id_is_refused_with_what_was_expected(text: str, says: str) -> None:
    with pytest.raises(NodeError) as caught:
        parse_node_id(text)
    assert says in str(caught.value)
    assert repr(text) in str(caught.value)


def test_a_namespace_that_the_server_lacks_is_named_with_those_it_has() -> None:
    with pytest.raises(NodeError, match="no namespace 'urn:gone'; its namespaces are: urn:server, urn:other"):
        parse_node_id("nsu=urn:gone;i=1").resolve(NAMESPACES)


@given(
    uri=st.text(min_size=1).filter(lambda text: text.strip() == text),
    identifier=st.one_of(
        st.tuples(st.just("i"), st.integers(0, 2**32 - 1)),
        st.tuples(st.just("s"), st.text(min_size=1).filter(lambda text: text.strip() == text)),
        st.tuples(st.just("g"), st.uuids()),
        st.tuples(st.just("b"), st.binary(min_size=1)),
    ),
)
def test_text_form_and_back(uri: str, identifier: tuple[str, object]) -> None:
    node = NamespacedNodeId(uri, *identifier)  # type: ignore[arg-type]
    assert parse_node_id(str(node)) == node
