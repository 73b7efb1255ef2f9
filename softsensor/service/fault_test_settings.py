"""The ``[fault_tests]`` table of a model file with new widenings and disarmed sensors; everything else is kept."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import replace

from plant_models.errors import Problem
from plant_models.model_file import parse_model_text
from plant_models.toml_lines import scan_toml_lines

SECTION = "fault_tests"


def with_fault_tests(
    text: str, file_name: str, widening: Mapping[str, float], disarmed: Mapping[str, str]
) -> str:
    """The text of a model file with these factors and reasons by sensor; an empty one takes the key out.

    :raises Problem: a key that stands where it cannot be changed by itself, such as a table over several lines.
    """
    mark = "\ufeff" if text.startswith("\ufeff") else ""
    source = text.removeprefix("\ufeff")
    spec = parse_model_text(source, file_name)
    result = _with_key(source, file_name, "widening", {tag: repr(value) for tag, value in widening.items()})
    result = _with_key(result, file_name, "disarmed", {tag: _quoted(why) for tag, why in disarmed.items()})
    found = parse_model_text(result, file_name)
    wanted = replace(spec, widening=tuple(widening.items()), disarmed=tuple(disarmed.items()))
    if replace(found, source_text="") != replace(wanted, source_text=""):
        raise Problem(f"{file_name}: [{SECTION}] cannot be changed without changing more; nothing is written")
    return mark + result


def _with_key(source: str, file_name: str, key: str, content: Mapping[str, str]) -> str:
    lines = re.findall(r"[^\n]*\n|[^\n]+$", source)
    end = "\r\n" if any(line.endswith("\r\n") for line in lines) else "\n"
    where = scan_toml_lines(source).lines
    items = ", ".join(f"{_key(tag)} = {value}" for tag, value in content.items())
    new = f"{key} = {{ {items} }}{end}" if content else ""
    if (SECTION, key) in where:
        at = where[(SECTION, key)] - 1
        if not re.match(rf"^\s*{key}\s*=\s*\{{.*\}}\s*(#.*)?$", lines[at]):
            raise Problem(
                f"{file_name}:{at + 1}: {key}: expected this key and its table alone on one line, so that it can be changed"
            )
        lines[at] = new
    elif content and (SECTION,) in where:
        at = where[(SECTION,)] - 1
        lines[at] = lines[at] if lines[at].endswith("\n") else lines[at] + end
        lines[at] += new
    elif content:
        last = "" if not lines or lines[-1].endswith("\n") else end
        lines.append(f"{last}{end}[{SECTION}]{end}{new}")
    return "".join(lines)


def _key(tag: str) -> str:
    return tag if re.fullmatch(r"[A-Za-z0-9_-]+", tag) else _quoted(tag)


def _quoted(text: str) -> str:
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'
