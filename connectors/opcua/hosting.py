"""What both of our servers stand on: a server of the library, with its gaps closed.

* A client that asks again for a lost message gets BadMessageNotAvailable or BadSubscriptionIdInvalid, not an
empty
  message marked Good (Part 4, 5.14.6), which traps clients after a restart of the server.
* Where encryption is asked for, a session on an unencrypted channel is refused, and so is a client whose
certificate
  is not in the trusted folder.
"""

from __future__ import annotations

import asyncio
import hmac
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from asyncua import Server, ua
from asyncua.common.utils import ServiceError
from asyncua.crypto.permission_rules import User, UserRole
from cryptography import x509
from cryptography.hazmat.primitives import serialization

from connectors.errors import ConnectorError, PlantConnectionError
from connectors.opcua.conditions import allow_conditions
from connectors.opcua.security import APPLICATION_NAME, check_peer, own_identity
from connectors.opcua.settings import address_fault, is_loopback


@dataclass(frozen=True, slots=True)
class ServerAccess:
    """Who may read from a server of ours.

    :param pki: folder of certificates (see :mod:`connectors.opcua.security`); None for an unencrypted server,
        which is allowed on a loopback address only.
    :param users: name to password; None lets everyone in who may open a channel.
    """

    pki: Path | None = None
    users: Mapping[str, str] | None = field(default=None, repr=False)


OPEN = ServerAccess()


class Doorkeeper:
    """Decides about each session; called by the library with what the client showed."""

    def __init__(self, access: ServerAccess) -> None:
        self._access = access

    def get_user(
        self,
        server: object,
        username: str | None = None,
        password: str | None = None,
        certificate: bytes | None = None,
    ) -> User | None:
        if self._access.pki is not None and not certificate:
            return None
        if self._access.users is not None and not self._knows(username, password):
            return None
        return User(role=UserRole.User)

    def _knows(self, username: str | None, password: str | None) -> bool:
        assert self._access.users is not None
        expected = self._access.users.get(username or "")
        given = (password or "").encode()
        return hmac.compare_digest(given, (expected or "").encode()) and expected is not None


async def make_server(endpoint: str, access: ServerAccess = OPEN, name: str = APPLICATION_NAME) -> Server:
    """A server that is set up but does not listen yet. Loading the standard's nodes takes a second or so.

    :raises ConnectorError: an address that does not parse, or encryption missing where it is needed.
    :raises PlantConnectionError: certificates that cannot be used.
    """
    fault = address_fault(endpoint)
    if fault is not None:
        raise ConnectorError(f"endpoint: {fault}")
    if access.pki is None and not is_loopback(endpoint):
        raise ConnectorError(
            f"{endpoint}: not a loopback address, so this server needs certificates; expected a pki folder"
        )
    server = Server(user_manager=Doorkeeper(access))
    server.set_server_name(name)
    allow_conditions(server)
    await server.init()
    server.set_endpoint(endpoint)
    _answer_republish_honestly(server)
    if access.pki is None:
        await server.set_application_uri(f"urn:localhost:{name}")
        server.set_security_policy([ua.SecurityPolicyType.NoSecurity])
    else:
        await _require_certificates(server, access.pki)
    tokens = [ua.AnonymousIdentityToken] if access.users is None else [ua.UserNameIdentityToken]
    server.set_identity_tokens(tokens)
    return server


async def start_server(server: Server, endpoint: str) -> None:
    """Listen.

    :raises ConnectorError: when the address cannot be had.
    """
    try:
        await server.start()
    except OSError as error:
        raise ConnectorError(f"{endpoint}: cannot listen there: {error.strerror or error}") from error


async def stop_server(server: Server) -> None:
    """Stop listening and end every session; the library would leave their subscriptions running."""
    await server.stop()
    service = server.iserver.subscription_service
    await service.delete_subscriptions(list(service.subscriptions))
    for session in list(server.iserver._external_sessions.values()):
        await session.close_session(False)
    await asyncio.sleep(0)


async def _require_certificates(server: Server, pki: Path) -> None:
    identity = await asyncio.to_thread(own_identity, pki)
    await server.set_application_uri(identity.application_uri)
    await server.load_certificate(str(identity.certificate))
    await server.load_private_key(str(identity.private_key))
    server.set_security_policy([ua.SecurityPolicyType.Basic256Sha256_SignAndEncrypt])

    async def only_trusted(certificate: x509.Certificate, application: ua.ApplicationDescription) -> None:
        der = certificate.public_bytes(serialization.Encoding.DER)
        try:
            await asyncio.to_thread(check_peer, pki, der, f"client {application.ApplicationUri}")
        except PlantConnectionError as error:
            raise ServiceError(ua.StatusCodes.BadCertificateUntrusted) from error

    server.set_certificate_validator(only_trusted)


def _answer_republish_honestly(server: Server) -> None:
    service = server.iserver.subscription_service

    def republish(parameters: ua.RepublishParameters) -> ua.NotificationMessage:
        subscription = service.subscriptions.get(parameters.SubscriptionId)
        if subscription is None:
            raise ServiceError(ua.StatusCodes.BadSubscriptionIdInvalid)
        message = subscription.republish(parameters.RetransmitSequenceNumber)
        if not message.NotificationData:
            raise ServiceError(ua.StatusCodes.BadMessageNotAvailable)
        return message

    service.republish = republish
