"""Certificates: our own, the peers that we trust, and those that we turned away.

::

    pki/own/certificate.der     our certificate, to be trusted by the plant's server
    pki/own/private_key.pem     its key, readable by its owner only
    pki/trusted/*.der           peers that a person let in
    pki/rejected/*.der          peers that came and were not trusted; move one to trusted/ to let it in

Source: OPC UA Part 6, 6.2.2 (application instance certificate: application URI and host names in the
alternative names, key usages), Part 7 Basic256Sha256 (RSA 2048 to 4096 bits, SHA-256).
"""

from __future__ import annotations

import asyncio
import contextlib
import hashlib
import os
import socket
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path

from asyncua import Client, ua
from asyncua.crypto.security_policies import SecurityPolicyBasic256Sha256
from cryptography import x509
from cryptography.hazmat.primitives import hashes, serialization
from cryptography.hazmat.primitives.asymmetric import rsa
from cryptography.x509.oid import ExtendedKeyUsageOID, NameOID

from connectors.errors import PlantConnectionError
from connectors.opcua.settings import OpcUaSettings

APPLICATION_NAME = "softsensor"
_KEY_BITS = 3072
_VALID_FOR = timedelta(days=5 * 365)
_CLOCK_TOLERANCE = timedelta(hours=1)


@dataclass(frozen=True, slots=True)
class OwnIdentity:
    """Our application instance: where its certificate and key are, and the URI in the certificate."""

    certificate: Path
    private_key: Path
    application_uri: str


async def secure_client(client: Client, settings: OpcUaSettings) -> None:
    """Give a client its user and, where the settings say so, its certificate and the server's, checked.

    :raises PlantConnectionError: when the server's certificate is not trusted; says which file to move where.
    """
    client.name = client.description = APPLICATION_NAME
    if settings.user:
        client.set_user(settings.user)
        client.set_password(settings.password or "")
    if not settings.encrypted:
        return
    assert settings.pki is not None
    identity = await asyncio.to_thread(own_identity, settings.pki)
    server_certificate = await _certificate_of_server(settings)
    await asyncio.to_thread(check_peer, settings.pki, server_certificate, f"{settings.endpoint}: the server")
    client.application_uri = identity.application_uri
    await client.set_security(
        SecurityPolicyBasic256Sha256,
        certificate=str(identity.certificate),
        private_key=str(identity.private_key),
        server_certificate=server_certificate,
        mode=ua.MessageSecurityMode.SignAndEncrypt,
    )


async def _certificate_of_server(settings: OpcUaSettings) -> bytes:
    """The certificate that the server offers for the wanted policy, asked for on a channel of its own."""
    asking = Client(settings.endpoint, timeout=settings.request_timeout)
    endpoints = await asking.connect_and_get_server_endpoints()
    endpoint = Client.find_endpoint(
        endpoints, ua.MessageSecurityMode.SignAndEncrypt, SecurityPolicyBasic256Sha256.URI
    )
    if not endpoint.ServerCertificate:
        raise PlantConnectionError(f"{settings.endpoint}: the server offers encryption without a certificate")
    return _first_of_chain(endpoint.ServerCertificate)


def _first_of_chain(chain: bytes) -> bytes:
    """The leading certificate of a chain in DER: a sequence whose length is in bytes 2 and 3."""
    return chain[: int.from_bytes(chain[2:4], "big") + 4] if chain[:2] == b"\x30\x82" else chain


def own_identity(pki: Path) -> OwnIdentity:
    """Our certificate and key, made on first use. Slow once (it makes a key), so call it off the event loop.

    :raises PlantConnectionError: when only one of the two is there, they cannot be read, or the time is over.
    """
    folder = pki / "own"
    certificate_file, key_file = folder / "certificate.der", folder / "private_key.pem"
    for name in ("own", "trusted", "rejected"):
        (pki / name).mkdir(parents=True, exist_ok=True)
    if not certificate_file.exists() and not key_file.exists():
        _make_identity(certificate_file, key_file)
    missing = [file for file in (certificate_file, key_file) if not file.exists()]
    if missing:
        raise PlantConnectionError(
            f"{missing[0]}: missing, while its other half is there; put it back, or remove both for new ones"
        )
    certificate = _load(certificate_file.read_bytes(), str(certificate_file))
    _check_time(certificate, str(certificate_file), "remove both files in that folder to have new ones made")
    return OwnIdentity(certificate_file, key_file, _application_uri(certificate, certificate_file))


def check_peer(pki: Path, certificate: bytes, who: str) -> None:
    """Let a peer in when its very certificate lies in trusted/; else keep it in rejected/ and say what to do.

    :param certificate: DER.
    :raises PlantConnectionError: when the peer is not trusted, or its certificate's time is over.
    """
    if not is_trusted(pki, certificate):
        rejected = pki / "rejected"
        rejected.mkdir(parents=True, exist_ok=True)
        file = rejected / f"{thumbprint(certificate)}.der"
        file.write_bytes(certificate)
        raise PlantConnectionError(
            f"{who} shows a certificate that is not trusted here ({_subject(certificate)}); compare its "
            f"thumbprint {thumbprint(certificate)} with the one shown there, and if it is the right one "
            f"move {file} to {pki / 'trusted'}"
        )
    _check_time(_load(certificate, who), f"{who}'s certificate", "it needs a new one")


def is_trusted(pki: Path, certificate: bytes) -> bool:
    """Whether this certificate (DER) is one of those in trusted/, whatever its file is called."""
    for file in sorted((pki / "trusted").glob("*")):
        if file.suffix.lower() in {".der", ".cer", ".crt", ".pem"} and _as_der(file) == certificate:
            return True
    return False


def thumbprint(certificate: bytes) -> str:
    """SHA-1 of the DER form, as OPC UA tools show it: a name for a certificate, not what trust rests on."""
    return hashlib.sha1(certificate, usedforsecurity=False).hexdigest().upper()


def _as_der(file: Path) -> bytes | None:
    content = file.read_bytes()
    if b"-----BEGIN" not in content:
        return content
    with contextlib.suppress(ValueError):
        return x509.load_pem_x509_certificate(content).public_bytes(serialization.Encoding.DER)
    return None


def _load(certificate: bytes, where: str) -> x509.Certificate:
    try:
        return x509.load_der_x509_certificate(certificate)
    except ValueError as error:
        raise PlantConnectionError(f"{where}: not a certificate ({error})") from error


def _subject(certificate: bytes) -> str:
    try:
        return x509.load_der_x509_certificate(certificate).subject.rfc4514_string()
    except ValueError:
        return "unreadable"


def _check_time(certificate: x509.Certificate, where: str, advice: str) -> None:
    now = datetime.now(UTC)
    if not certificate.not_valid_before_utc <= now <= certificate.not_valid_after_utc:
        raise PlantConnectionError(
            f"{where}: valid from {certificate.not_valid_before_utc:%Y-%m-%d} to "
            f"{certificate.not_valid_after_utc:%Y-%m-%d} only; {advice}"
        )


def _application_uri(certificate: x509.Certificate, where: Path) -> str:
    try:
        names = certificate.extensions.get_extension_for_class(x509.SubjectAlternativeName).value
        return str(names.get_values_for_type(x509.UniformResourceIdentifier)[0])
    except (x509.ExtensionNotFound, IndexError):
        raise PlantConnectionError(f"{where}: holds no application URI in its alternative names") from None


def _make_identity(certificate_file: Path, key_file: Path) -> None:
    host = socket.gethostname()
    key = rsa.generate_private_key(public_exponent=65537, key_size=_KEY_BITS)
    certificate = _self_signed(key, host, f"urn:{host}:{APPLICATION_NAME}")
    pem = key.private_bytes(
        serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8, serialization.NoEncryption()
    )
    with os.fdopen(os.open(key_file, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600), "wb") as file:
        file.write(pem)
    certificate_file.write_bytes(certificate.public_bytes(serialization.Encoding.DER))


def _self_signed(key: rsa.RSAPrivateKey, host: str, application_uri: str) -> x509.Certificate:
    name = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, f"{APPLICATION_NAME} on {host}"[:64])])
    now = datetime.now(UTC)
    alternatives = x509.SubjectAlternativeName(
        [x509.UniformResourceIdentifier(application_uri), x509.DNSName(host)]
    )
    usage = x509.KeyUsage(
        digital_signature=True,
        content_commitment=True,
        key_encipherment=True,
        data_encipherment=True,
        key_agreement=False,
        key_cert_sign=True,
        crl_sign=False,
        encipher_only=False,
        decipher_only=False,
    )
    both_roles = x509.ExtendedKeyUsage([ExtendedKeyUsageOID.CLIENT_AUTH, ExtendedKeyUsageOID.SERVER_AUTH])
    return (
        x509.CertificateBuilder()
        .subject_name(name)
        .issuer_name(name)
        .public_key(key.public_key())
        .serial_number(x509.random_serial_number())
        .not_valid_before(now - _CLOCK_TOLERANCE)
        .not_valid_after(now + _VALID_FOR)
        .add_extension(alternatives, critical=False)
        .add_extension(x509.BasicConstraints(ca=False, path_length=None), critical=True)
        .add_extension(usage, critical=True)
        .add_extension(both_roles, critical=False)
        .add_extension(x509.SubjectKeyIdentifier.from_public_key(key.public_key()), critical=False)
        .add_extension(x509.AuthorityKeyIdentifier.from_issuer_public_key(key.public_key()), critical=False)
        .sign(key, hashes.SHA256())
    )
