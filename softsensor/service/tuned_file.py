"""A model file with some numbers changed and everything else kept: comments, order, spacing, line ends."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from plant_models.durations import format_duration, parse_duration
from plant_models.errors import Problem
from plant_models.model_file import parse_model_text
from plant_models.specification import SensorSpec, UnitSpec
from plant_models.toml_lines import Place, TomlLines, scan_toml_lines

UNITS_OF_TIME = (("s", 1.0, 180.0), ("min", 60.0, 10800.0), ("h", 3600.0, math.inf))
"""Unit, seconds in it, and the time below which it is used."""
_VALUE = r"""(?:"[^"\\]*"|'[^']*'|[+-]?[0-9][0-9_.eE+-]*|[+-]?\.[0-9][0-9eE+-]*)"""


@dataclass(frozen=True, slots=True)
class Change:
    """A number of a model file: its place, such as ("sensor", 1, "noise_sd"), and its new value; times in seconds."""

    place: tuple[str, int, str]
    value: float

    @property
    def text(self) -> str:
        """The value as a model file has it."""
        if self.place[2] == "time_constant":
            return f'"{time_text(self.value)}"'
        return repr(float(self.value))


def time_text(seconds: float) -> str:
    """A time in the unit that suits its size where that gives it exactly, else its shortest text.

    >>> time_text(8298.0), time_text(90.0), time_text(1.0 / 3.0)
    ('138.3 min', '90 s', '0.3333333333333333 s')
    """
    unit, size = next((unit, size) for unit, size, until in UNITS_OF_TIME if seconds < until)
    text = f"{seconds / size:.6g} {unit}"
    return text if parse_duration(text) == seconds else format_duration(seconds)


def changed_spec(spec: UnitSpec, changes: Sequence[Change], tolerance_given: Sequence[bool]) -> UnitSpec:
    """The specification that the changed file has; a tolerance that the file leaves to its default follows noise_sd."""
    parts: dict[str, list[object]] = {
        "sensor": list(spec.sensors),
        "estimate": list(spec.estimates),
        "disturbance": list(spec.disturbances),
    }
    for change in changes:
        section, index, key = change.place
        new: Mapping[str, float] = {key: change.value}
        if key == "noise_sd" and not tolerance_given[index]:
            new = {key: change.value, "tolerance": 4.0 * change.value}
        parts[section][index] = replace(parts[section][index], **new)  # type: ignore[type-var]
    return replace(
        spec,
        sensors=tuple(item for item in parts["sensor"] if isinstance(item, SensorSpec)),
        estimates=tuple(parts["estimate"]),  # type: ignore[arg-type]
        disturbances=tuple(parts["disturbance"]),  # type: ignore[arg-type]
    )


def tolerances_given(spec: UnitSpec) -> list[bool]:
    """For each sensor: does the file state its tolerance?"""
    lines = scan_toml_lines(spec.source_text).lines
    return [("sensor", index, "tolerance") in lines for index in range(len(spec.sensors))]


def changed_text(text: str, file_name: str, changes: Sequence[Change]) -> str:
    """The text of a model file with these numbers changed at their lines; a key that is missing follows the tag's line.

    :raises Problem: a number that stands where it cannot be changed by itself (in a table on one line, for instance).
    """
    mark = "\ufeff" if text.startswith("\ufeff") else ""
    source = text.removeprefix("\ufeff")
    spec = parse_model_text(source, file_name)
    lines = re.findall(r"[^\n]*\n|[^\n]+$", source)
    where = scan_toml_lines(source)
    added: dict[int, str] = {}
    for change in changes:
        if change.place in where.lines:
            at = where.lines[change.place] - 1
            lines[at] = _with_value(lines[at], change, file_name, at + 1)
        else:
            at = _line_of_tag(where, change.place, file_name)
            end = "\r\n" if lines[at].endswith("\r\n") else "\n"
            indent = lines[at][: len(lines[at]) - len(lines[at].lstrip())]
            lines[at] = lines[at] if lines[at].endswith("\n") else lines[at] + end
            added[at] = added.get(at, "") + f"{indent}{change.place[2]} = {change.text}{end}"
    result = "".join(line + added.get(at, "") for at, line in enumerate(lines))
    wanted = changed_spec(spec, changes, tolerances_given(spec))
    found = parse_model_text(result, file_name)
    if replace(found, source_text="") != replace(wanted, source_text=""):
        raise Problem(
            f"{file_name}: the tuned numbers cannot be put in without changing others; nothing is written"
        )
    return mark + result


def _with_value(line: str, change: Change, file_name: str, number: int) -> str:
    key = re.escape(change.place[2])
    pattern = rf"""^(\s*(?:{key}|"{key}"|'{key}')\s*=\s*)({_VALUE})([ \t]*)((?:#.*)?\r?\n?)$"""
    match = re.match(pattern, line)
    if match is None:
        raise Problem(
            f"{file_name}:{number}: {change.place[2]}: expected this key and its value alone on a line, so that the "
            f"value can be changed to {change.text}"
        )
    gap = match[3]
    if match[4].startswith("#"):
        gap = " " * max(1, len(gap) + len(match[2]) - len(change.text))
    return f"{match[1]}{change.text}{gap}{match[4]}"


def _line_of_tag(where: TomlLines, place: Place, file_name: str) -> int:
    section, index, key = place
    tag = where.lines.get((section, index, "tag"))
    header = where.lines.get((section, index))
    if tag is None or tag == header:
        raise Problem(
            f"{file_name}:{where.line(section, index)}: {key}: expected a table with its keys on lines of their own, "
            "so that this key can be added"
        )
    return tag - 1
