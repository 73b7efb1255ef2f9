"""Encrypted sessions: nobody is trusted unseen, and the message says which file to move where."""

from __future__ import annotations

import asyncio
import os
import shutil
from pathlib import Path

import pytest
from cryptography import x509
from cryptography.hazmat.primitives import hashes, serialization

from connectors.errors import ConnectorError, PlantConnectionError
from connectors.events import ConnectionChange
from connectors.opcua.hosting import Doorkeeper, ServerAccess, make_server
from connectors.opcua.security import check_peer, is_trusted, own_identity, thumbprint
from connectors.opcua.settings import OpcUaSettings
from connectors.opcua.source import OpcUaSource
from connectors.opcua.tag_server import ServedTag, TagServer
from connectors.readings import Reading

URI = "urn:example:plant"
START = 1_796_104_800_000_000
PATIENCE = 120.0


@pytest.fixture(scope="module")
def identities(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A plant's and a client's own certificates, made once; tests copy them."""
    folder = tmp_path_factory.mktemp("identities")
    for name in ("plant", "client"):
        own_identity(folder / name)
    return folder


@pytest.fixture
def pki(identities: Path, tmp_path: Path) -> Path:
    """The two folders, neither trusting the other."""
    shutil.copytree(identities, tmp_path / "pki")
    return tmp_path / "pki"


def trust_what_was_rejected(folder: Path) -> None:
    (rejected,) = (folder / "rejected").glob("*.der")
    shutil.move(rejected, folder / "trusted")


async def probe(settings: OpcUaSettings, nodes: dict[str, str]) -> str:
    """What a start would say: empty when all is well."""
    try:
        await OpcUaSource(settings, nodes).probe()
    except PlantConnectionError as error:
        return str(error)
    return ""


def test_a_session_is_encrypted_once_each_side_trusts_the_other(
    endpoint: str, plant_tags: list[ServedTag], pki: Path
) -> None:
    access = ServerAccess(pki / "plant", {"softsensor": "right password"})
    settings = OpcUaSettings(
        endpoint,
        security_policy="Basic256Sha256",
        user="softsensor",
        password="right password",
        pki=pki / "client",
        publishing_interval=0.03,
    )
    wrong = OpcUaSettings(
        endpoint, "Basic256Sha256", user="softsensor", password="wrong password", pki=pki / "client"
    )
    nobody = OpcUaSettings(endpoint, "Basic256Sha256", pki=pki / "client")
    open_channel = OpcUaSettings(endpoint, user="softsensor", password="right password")

    async def scenario() -> tuple[list[str], Reading]:
        async with TagServer(endpoint, URI, plant_tags, access) as plant, asyncio.timeout(PATIENCE):
            nodes = plant.node_ids()
            said = [await probe(settings, nodes)]
            trust_what_was_rejected(pki / "client")
            said.append(await probe(settings, nodes))
            trust_what_was_rejected(pki / "plant")
            said += [await probe(each, nodes) for each in (wrong, nobody, open_channel, settings)]
            async with OpcUaSource(settings, nodes) as source:
                await plant.write("TI2101", 92.4, START)
                async for event in source.events():
                    if isinstance(event, Reading) and event.time == START:
                        return said, event
        raise AssertionError("the source ended")

    (unknown, untrusted, wrong_said, nobody_said, open_said, right_said), reading = asyncio.run(scenario())
    name = thumbprint((pki / "plant" / "own" / "certificate.der").read_bytes())
    assert unknown.startswith(f"{endpoint}: the server shows a certificate that is not trusted here")
    assert f"move {pki / 'client' / 'rejected' / name}.der to {pki / 'client' / 'trusted'}" in unknown
    assert "the server refused our certificate (BadCertificateUntrusted)" in untrusted
    assert str(pki / "client" / "own" / "certificate.der") in untrusted
    assert wrong_said == f"{endpoint}: the server refused user 'softsensor' (BadUserAccessDenied)"
    assert "the server refused a session without a user" in nobody_said
    assert open_said == f"{endpoint}: the server offers no endpoint with security policy None"
    assert right_said == ""
    assert "password" not in "".join((unknown, untrusted, wrong_said, nobody_said, open_said))
    assert reading.value == 92.4


def test_a_refused_user_is_told_as_an_event(endpoint: str, plant_tags: list[ServedTag]) -> None:
    access = ServerAccess(users={"softsensor": "right password"})
    settings = OpcUaSettings(endpoint, user="softsensor", password="wrong password")

    async def scenario() -> ConnectionChange:
        plant = TagServer(endpoint, URI, plant_tags[:1], access)
        source = OpcUaSource(settings, plant.node_ids())
        async with plant, source, asyncio.timeout(PATIENCE):
            event = await anext(source.events())
        assert isinstance(event, ConnectionChange)
        return event

    change = asyncio.run(scenario())
    assert change.state == "disconnected"
    assert change.reason == f"{endpoint}: the server refused user 'softsensor' (BadUserAccessDenied)"


def test_the_door_stays_shut_to_unencrypted_channels_and_unknown_users(tmp_path: Path) -> None:
    encrypted = Doorkeeper(ServerAccess(pki=tmp_path))
    assert encrypted.get_user(None, certificate=b"") is None
    assert encrypted.get_user(None, certificate=None) is None
    assert encrypted.get_user(None, certificate=b"shown") is not None
    named = Doorkeeper(ServerAccess(users={"ann": "her password"}))
    assert named.get_user(None, "ann", "her password") is not None
    assert named.get_user(None, "ann", "other") is None
    assert named.get_user(None, "bob", "") is None
    assert named.get_user(None, None, None) is None


def test_our_certificate_is_made_once_and_says_who_we_are(identities: Path) -> None:
    first = own_identity(identities / "client")
    content = first.certificate.read_bytes()
    assert own_identity(identities / "client") == first
    assert first.certificate.read_bytes() == content
    certificate = x509.load_der_x509_certificate(content)
    names = certificate.extensions.get_extension_for_class(x509.SubjectAlternativeName).value
    assert names.get_values_for_type(x509.UniformResourceIdentifier) == [first.application_uri]
    assert isinstance(certificate.signature_hash_algorithm, hashes.SHA256)
    key = serialization.load_pem_private_key(first.private_key.read_bytes(), password=None)
    assert key.public_key() == certificate.public_key()
    if os.name == "posix":
        assert first.private_key.stat().st_mode & 0o077 == 0


def test_half_an_identity_is_not_replaced_silently(pki: Path) -> None:
    (pki / "client" / "own" / "private_key.pem").unlink()
    with pytest.raises(PlantConnectionError, match=r"private_key\.pem: missing"):
        own_identity(pki / "client")


def test_a_file_that_is_no_certificate_is_named(pki: Path) -> None:
    (pki / "client" / "own" / "certificate.der").write_bytes(b"not one")
    with pytest.raises(PlantConnectionError, match=r"certificate\.der: not a certificate"):
        own_identity(pki / "client")


def test_a_trusted_certificate_may_be_in_pem_form_under_any_name(pki: Path) -> None:
    der = (pki / "plant" / "own" / "certificate.der").read_bytes()
    pem = x509.load_der_x509_certificate(der).public_bytes(serialization.Encoding.PEM)
    assert not is_trusted(pki / "client", der)
    (pki / "client" / "trusted" / "the plant.pem").write_bytes(pem)
    (pki / "client" / "trusted" / "broken.pem").write_bytes(b"-----BEGIN CERTIFICATE-----\nno\n")
    assert is_trusted(pki / "client", der)
    check_peer(pki / "client", der, "the plant")
    with pytest.raises(PlantConnectionError, match="not trusted here"):
        check_peer(pki / "client", (pki / "client" / "own" / "certificate.der").read_bytes(), "another")


def test_a_server_for_other_machines_needs_certificates() -> None:
    with pytest.raises(ConnectorError, match="not a loopback address"):
        asyncio.run(make_server("opc.tcp://0.0.0.0:4850"))
