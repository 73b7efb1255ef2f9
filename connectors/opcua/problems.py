"""Errors of the OPC UA library and of sockets, in our own error tree and in plain sentences."""

from __future__ import annotations

import socket

from asyncua import ua

from connectors.errors import PlantConnectionError
from connectors.opcua.quality import status_text
from connectors.opcua.settings import OpcUaSettings

LIBRARY_ERRORS = (ua.UaError, OSError, TimeoutError)
"""What a request to a server may raise; a lost connection is an OSError."""

_USER_REFUSED = {
    ua.StatusCodes.BadUserAccessDenied,
    ua.StatusCodes.BadIdentityTokenRejected,
    ua.StatusCodes.BadIdentityTokenInvalid,
    ua.StatusCodes.BadUserSignatureInvalid,
}
_CERTIFICATE_REFUSED = {
    ua.StatusCodes.BadCertificateUntrusted,
    ua.StatusCodes.BadSecurityChecksFailed,
    ua.StatusCodes.BadCertificateInvalid,
    ua.StatusCodes.BadCertificateUriInvalid,
    ua.StatusCodes.BadCertificateUseNotAllowed,
}


def connection_error(settings: OpcUaSettings, error: BaseException) -> PlantConnectionError:
    """The error that a user sees for a failed connection: the address, what happened, what to look at."""
    return PlantConnectionError(f"{settings.endpoint}: {plain_reason(settings, error)}")


def user_refused(error: PlantConnectionError) -> bool:
    """Whether the server turned our user away, so that trying again soon would do harm."""
    cause = error.__cause__
    return isinstance(cause, ua.UaStatusCodeError) and cause.code in _USER_REFUSED


def plain_reason(settings: OpcUaSettings, error: BaseException) -> str:
    """What went wrong, in one plain sentence without the address."""
    if isinstance(error, ua.UaStatusCodeError):
        return _status_reason(settings, error.code)
    if isinstance(error, ConnectionRefusedError):
        return "connection refused; is the server running, and is this its port?"
    if isinstance(error, socket.gaierror):
        return "the host's name is not known here"
    if isinstance(error, TimeoutError):
        return f"no answer within {settings.request_timeout:g} s"
    if isinstance(error, ConnectionError):
        return "the server closed the connection" + _hint_certificate(settings)
    if isinstance(error, ua.UaError) and "No matching endpoints" in str(error):
        return f"the server offers no endpoint with security policy {settings.security_policy}"
    return str(error) or type(error).__name__


def _status_reason(settings: OpcUaSettings, code: int) -> str:
    name = status_text(code)
    if code in _USER_REFUSED:
        who = f"user {settings.user!r}" if settings.user else "a session without a user"
        return f"the server refused {who} ({name})"
    if code in _CERTIFICATE_REFUSED:
        return f"the server refused our certificate ({name})" + _hint_certificate(settings)
    return f"the server answered {name}"


def _hint_certificate(settings: OpcUaSettings) -> str:
    if not settings.encrypted or settings.pki is None:
        return ""
    return f"; does it trust our certificate, {settings.pki / 'own' / 'certificate.der'}?"
