"""How to reach a plant's OPC UA server: frozen, checked once, without a secret in any text form."""

from __future__ import annotations

import ipaddress
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal, get_args
from urllib.parse import urlsplit

from connectors.errors import ConnectorError

SecurityPolicy = Literal["None", "Basic256Sha256"]


@dataclass(frozen=True, slots=True)
class OpcUaSettings:
    """The plant's server, and how we speak to it.

    :param endpoint: ``opc.tcp://host:port``.
    :param security_policy: ``Basic256Sha256`` signs and encrypts; ``None`` is for a loopback address, or for
        those who say ``allow_unencrypted``.
    :param pki: folder of our own certificate and key and of the peers that we trust; needed unless
        unencrypted.
    :param publishing_interval: seconds between the server's publications.
    :param sampling_interval: seconds between the server's looks at each value; 0 asks for every change, None
        for half the publishing interval.
    :param request_timeout: seconds that one request may take.
    :raises ConnectorError: one line per fault.
    """

    endpoint: str
    security_policy: SecurityPolicy = "None"
    user: str | None = None
    password: str | None = field(default=None, repr=False)
    pki: Path | None = None
    allow_unencrypted: bool = False
    publishing_interval: float = 0.5
    sampling_interval: float | None = None
    request_timeout: float = 4.0

    def __post_init__(self) -> None:
        faults = tuple(self._faults())
        if faults:
            raise ConnectorError(*faults)

    @property
    def encrypted(self) -> bool:
        return self.security_policy != "None"

    @property
    def sampling(self) -> float:
        """Sampling interval in force, in seconds."""
        return 0.5 * self.publishing_interval if self.sampling_interval is None else self.sampling_interval

    def _faults(self) -> Iterator[str]:
        address = address_fault(self.endpoint)
        if address is not None:
            yield f"endpoint: {address}"
        if self.security_policy not in get_args(SecurityPolicy):
            known = ", ".join(get_args(SecurityPolicy))
            yield f"security_policy: {self.security_policy!r}; expected one of: {known}"
        elif self.encrypted and self.pki is None:
            yield f"pki: missing; {self.security_policy} needs a folder for certificates"
        elif (
            not self.encrypted
            and address is None
            and not self.allow_unencrypted
            and not is_loopback(self.endpoint)
        ):
            yield (
                f'security_policy: "None" to {self.endpoint}, which is not a loopback address; expected '
                '"Basic256Sha256", or allow_unencrypted = true'
            )
        if self.password is not None and not self.user:
            yield "password: given without a user"
        for name in ("publishing_interval", "request_timeout"):
            if not 0.0 < getattr(self, name) < float("inf"):
                yield f"{name}: {getattr(self, name)!r}; expected a number of seconds above zero"
        if self.sampling_interval is not None and not 0.0 <= self.sampling_interval < float("inf"):
            yield f"sampling_interval: {self.sampling_interval!r}; expected a number of seconds, zero or more"


def address_fault(endpoint: str) -> str | None:
    """What is wrong with an endpoint's address, or None."""
    expected = "expected opc.tcp://host:port"
    try:
        parts = urlsplit(endpoint)
        port = parts.port
    except ValueError:
        return f"{_without_password(endpoint)!r} is no address; {expected}"
    if parts.username is not None or parts.password is not None:
        return f"{_without_password(endpoint)!r} with a user in it; that has a key of its own; {expected}"
    if parts.scheme != "opc.tcp" or not parts.hostname or port is None:
        return f"{endpoint!r}; {expected}"
    return None


def is_loopback(endpoint: str) -> bool:
    """Whether an endpoint's host is this machine by its very name or number."""
    host = urlsplit(endpoint).hostname or ""
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def _without_password(endpoint: str) -> str:
    scheme, separator, rest = endpoint.partition("://")
    return f"{scheme}{separator}{rest.rpartition('@')[2]}"
