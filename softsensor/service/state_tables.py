"""The ``[[unit.state]]`` tables of a site file, and ``[[state]]`` tables of a file for replays, as checked rules."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path

from plant_models.model_kinds import DURATION, NAME, NUMBER, TAG
from plant_models.model_tables import FaultList, Table, rows, unknown_sections
from plant_models.quoting import quoted
from plant_models.specification import UnitSpec
from plant_models.toml_lines import scan_toml_lines
from softsensor.errors import SiteFileError
from softsensor.service.plant_state import StateRule

LIMITS = ("below", "above", "equals")
KEYS = ("name", "tag", *LIMITS, "for", "settle", "sensor")


def states_of(table: Table) -> tuple[StateRule, ...]:
    """The states of one unit's table in the site file."""
    value = table.values.get("state", [])
    if not isinstance(value, list) or not all(isinstance(item, dict) for item in value):
        table.fault("state", f"expected [[unit.state]] tables; got {quoted(value)}")
        return ()
    tables = [Table(item, (*table.place, "state", number), table.faults) for number, item in enumerate(value)]
    return read_states(tables)


def read_states(tables: Sequence[Table]) -> tuple[StateRule, ...]:
    """The rules of these tables; two that say the same are a fault of the second."""
    found: dict[StateRule, Table] = {}
    for table in tables:
        rule = _state(table)
        same = [other for other in found if (other.name, other.condition) == (rule.name, rule.condition)]
        if any(other.sensor == rule.sensor for other in same):
            table.fault("name", f"{rule.name} with the condition {rule.condition} is there already")
        found[rule] = table
    return tuple(found)


def _state(table: Table) -> StateRule:
    table.only(*KEYS)
    limits: dict[str, float | None] = {key: table.read_or(key, NUMBER, None) for key in LIMITS}
    given = [key for key in LIMITS if key in table.values]
    if not given or ("equals" in given and len(given) > 1):
        table.fault(given[0] if given else "below", "expected below, above or both, or equals alone")
        limits = {"below": 0.0, "above": None, "equals": None}
    elif len(given) == 2 and limits["below"] == limits["above"]:
        table.fault("below", "expected another value than that of above")
        limits["above"] = None
    return StateRule(
        table.read("name", NAME),
        table.read("tag", TAG),
        limits["below"],
        limits["above"],
        limits["equals"],
        lasting=round(table.read_or("for", DURATION, 0.0) * 1e6),
        settle=round(table.read_or("settle", DURATION, 0.0) * 1e6),
        sensor=table.read_or("sensor", TAG, ""),
    )


def read_states_file(path: str | Path) -> tuple[StateRule, ...]:
    """The states of a file with ``[[state]]`` tables, for a replay of a recorded history.

    :raises SiteFileError: one line per fault, with file, line, key and what was expected.
    """
    name = str(path)
    try:
        text = Path(path).read_text(encoding="utf-8")
        document = tomllib.loads(text)
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SiteFileError(f"{name}:1: expected a readable file; {reason}") from None
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        line = re.search(r"line (\d+)", str(error))
        raise SiteFileError(f"{name}:{line[1] if line else 1}: expected TOML; {error}") from None
    faults = FaultList(name, scan_toml_lines(text))
    unknown_sections(document, ("state",), faults)
    rules = read_states(rows(document, "state", faults))
    if not document.get("state"):
        faults.add(("state",), "state", "missing; expected at least one [[state]]")
    found = faults.in_order()
    if found:
        raise SiteFileError(*(str(fault) for fault in found))
    return rules


def fitted_states(
    rules: Iterable[StateRule], spec: UnitSpec, tags: Iterable[str], where: str
) -> tuple[StateRule, ...]:
    """The rules with the units of their tags, fitted to a model.

    :param tags: all tags that have readings.
    :param where: what messages call the rules' file.
    :raises SiteFileError: a tag without readings, or a sensor that the model does not have.
    """
    units = {item.tag: item.unit for item in spec.inputs} | {item.tag: item.unit for item in spec.sensors}
    known, sensors = set(tags), {item.tag for item in spec.sensors}
    fitted, lines = [], []
    for rule in rules:
        if rule.tag not in known:
            lines.append(f"{where}: state {rule.name}: tag {rule.tag} has no readings; expected one that has")
        if rule.sensor and rule.sensor not in sensors:
            lines.append(f"{where}: state {rule.name}: {rule.sensor} is no sensor of {spec.name}")
        fitted.append(replace(rule, unit=units.get(rule.tag, "")))
    if lines:
        raise SiteFileError(*lines)
    return tuple(fitted)
