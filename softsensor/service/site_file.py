"""The site file: which plant, which units, which database. TOML in, checked settings out, every fault at once."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from plant_models.errors import Fault
from plant_models.model_kinds import Kind, RefusalError
from plant_models.model_tables import FaultList, Table, rows, single, unknown_sections
from plant_models.toml_lines import scan_toml_lines
from softsensor.errors import SiteFileError
from softsensor.service.plant_state import StateRule
from softsensor.service.state_tables import states_of

SECTIONS = ("database", "plant", "publish", "web", "unit", "clock")
VARIABLE = re.compile(r"\$\{([A-Za-z_][A-Za-z0-9_]*)\}")


@dataclass(frozen=True, slots=True)
class PlantSettings:
    """The plant's OPC UA server; ``pki`` is resolved against the site file's folder."""

    endpoint: str
    security_policy: str
    user: str | None
    password: str | None = field(repr=False)
    pki: Path | None
    allow_unencrypted: bool
    publishing_interval: float


@dataclass(frozen=True, slots=True)
class UnitSettings:
    """One unit: its model file, by tag the plant's node ids, and the states of the plant in which its tests rest."""

    model: Path
    nodes: Mapping[str, str]
    states: tuple[StateRule, ...] = ()


@dataclass(frozen=True, slots=True)
class ClockSettings:
    """A simulated plant whose time runs ``speed`` times as fast as the wall's: its readings' timestamps are the clock."""

    speed: float


@dataclass(frozen=True, slots=True)
class SiteSettings:
    """A whole site file."""

    path: Path
    database: str = field(repr=False)
    plant: PlantSettings
    publish: str | None
    web: tuple[str, int] | None
    units: tuple[UnitSettings, ...]
    clock: ClockSettings | None = None


def _word(value: object) -> str:
    if not isinstance(value, str) or not value.strip():
        raise RefusalError("")
    return value.strip()


def _policy(value: object) -> str:
    text = _word(value)
    if text not in ("None", "Basic256Sha256"):
        raise RefusalError("")
    return text


def _switch(value: object) -> bool:
    if not isinstance(value, bool):
        raise RefusalError("")
    return value


def _address(value: object) -> tuple[str, int]:
    host, colon, port = _word(value).rpartition(":")
    if not colon or not host or not port.isdigit() or not 0 <= int(port) < 65536:
        raise RefusalError("")
    return host.strip("[]"), int(port)


def _nodes(value: object) -> Mapping[str, str]:
    if not isinstance(value, dict) or not value:
        raise RefusalError("")
    if not all(isinstance(item, str) and item.strip() for item in value.values()):
        raise RefusalError("where each value must be a text")
    return {str(tag): str(node) for tag, node in value.items()}


def _speed(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0.0 < value < 1e6:
        raise RefusalError("")
    return float(value)


def _secret(value: object) -> str:
    if not isinstance(value, str) or not value:
        raise RefusalError("")
    return value


class SecretKind(Kind[str]):
    """A value that no message shows."""

    def refusal(self, value: object, reason: str) -> str:
        """What was expected, and nothing of what was found."""
        return f"expected {self.expected}"


TEXT: Kind[str] = Kind("a text", _word, "-")
PASSWORD = SecretKind('a text such as "${PLANT_PASSWORD}"', _secret, "-")
DATABASE_URL = SecretKind(
    'a database\'s address such as "sqlite:///records.db" or "postgresql+psycopg://user@host/name"',
    _word,
    "-",
)
ENDPOINT: Kind[str] = Kind('an address such as "opc.tcp://plant-server:4840"', _word, "opc.tcp://localhost:1")
POLICY: Kind[str] = Kind('"Basic256Sha256" or "None"', _policy, "None")
SWITCH: Kind[bool] = Kind("true or false", _switch, False)
ADDRESS: Kind[tuple[str, int]] = Kind('host and port such as "127.0.0.1:8080"', _address, ("127.0.0.1", 1))
NODES: Kind[Mapping[str, str]] = Kind(
    'node ids by tag such as { FI2103 = "nsu=urn:example:plant;s=R210.FI2103" }', _nodes, {}
)
SPEED: Kind[float] = Kind("a number above zero", _speed, 1.0)


def read_site_file(path: str | Path, environment: Mapping[str, str] | None = None) -> SiteSettings:
    """Read and check a site file; ``${NAME}`` is taken from the environment in every text value.

    :raises SiteFileError: one line per fault, with file, line, key and what was expected.
    """
    name = str(path)
    try:
        text = Path(path).read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SiteFileError(f"{name}:1: expected a readable site file; {reason}") from None
    try:
        document = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        line = re.search(r"line (\d+)", str(error))
        raise SiteFileError(f"{name}:{line[1] if line else 1}: expected TOML; {error}") from None
    faults = FaultList(name, scan_toml_lines(text))
    document = _expanded(document, (), os.environ if environment is None else environment, faults)
    settings = _settings(document, Path(path), faults)
    found: tuple[Fault, ...] = faults.in_order()
    if found:
        raise SiteFileError(*(str(fault) for fault in found))
    return settings


def _expanded(value: Any, place: tuple[Any, ...], environment: Mapping[str, str], faults: FaultList) -> Any:
    """Texts with their ``${NAME}`` replaced; a name that is not set is a fault where it stands."""
    if isinstance(value, dict):
        return {key: _expanded(item, (*place, key), environment, faults) for key, item in value.items()}
    if isinstance(value, list):
        return [_expanded(item, (*place, number), environment, faults) for number, item in enumerate(value)]
    if not isinstance(value, str):
        return value
    for name in VARIABLE.findall(value):
        if name not in environment:
            faults.add(place, str(place[-1]), f"expected {name} in the environment; it is not set")
    return VARIABLE.sub(lambda match: environment.get(match[1], "-"), value)


def _settings(document: dict[str, Any], path: Path, faults: FaultList) -> SiteSettings:
    unknown_sections(document, SECTIONS, faults)
    database = _section(document, "database", faults, required=True)
    database.only("url")
    publish = _section(document, "publish", faults)
    publish.only("endpoint")
    web = _section(document, "web", faults)
    web.only("address")
    units = rows(document, "unit", faults)
    if not units:
        faults.add(("unit",), "unit", "missing; expected at least one [[unit]]")
    return SiteSettings(
        path,
        database.read("url", DATABASE_URL),
        _plant(_section(document, "plant", faults, required=True), path),
        publish.read("endpoint", ENDPOINT) if "publish" in document else None,
        web.read("address", ADDRESS) if "web" in document else None,
        tuple(_unit(table, path) for table in units),
        _clock(_section(document, "clock", faults)) if "clock" in document else None,
    )


def _section(document: dict[str, Any], name: str, faults: FaultList, required: bool = False) -> Table:
    table = single(document, name, faults)
    if table is not None:
        return table
    if required and name not in document:
        faults.add((name,), name, f"missing; expected [{name}]")
    return Table({}, (name,), FaultList("", scan_toml_lines("")))


def _plant(table: Table, path: Path) -> PlantSettings:
    table.only(
        "endpoint", "security_policy", "user", "password", "pki", "allow_unencrypted", "publishing_interval"
    )
    pki = table.read_or("pki", TEXT, None)
    return PlantSettings(
        table.read("endpoint", ENDPOINT),
        table.read_or("security_policy", POLICY, "Basic256Sha256"),
        table.read_or("user", TEXT, None),
        table.read_or("password", PASSWORD, None),
        path.parent / pki if pki is not None else None,
        table.read_or("allow_unencrypted", SWITCH, False),
        table.read_or("publishing_interval", SPEED, 0.5),
    )


def _unit(table: Table, path: Path) -> UnitSettings:
    table.only("model", "nodes", "state")
    return UnitSettings(path.parent / table.read("model", TEXT), table.read("nodes", NODES), states_of(table))


def _clock(table: Table) -> ClockSettings:
    table.only("speed")
    return ClockSettings(table.read("speed", SPEED))
