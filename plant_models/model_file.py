"""The model file: TOML in, a checked UnitSpec out, or every fault at once with its line, key and expectation.

The format is described in the handbook. Positions come from toml_lines, kinds of values from model_kinds,
sections from model_sections and model_paths, and what the sections must be to each other from model_checks.
"""

from __future__ import annotations

import re
import tomllib
from dataclasses import replace
from pathlib import Path
from typing import Any

from plant_models.errors import Fault, ModelFileError
from plant_models.model_checks import check_dead_times, check_whole
from plant_models.model_paths import read_path
from plant_models.model_scale import in_model_scale
from plant_models.model_schedules import check_schedules
from plant_models.model_sections import (
    check_interval,
    read_disturbance,
    read_estimate,
    read_fault_tests,
    read_input,
    read_sensor,
    read_unit,
)
from plant_models.model_tables import FaultList, Table, rows, single, unknown_sections
from plant_models.schedules import operating_points, path_in_operation
from plant_models.specification import UnitSpec
from plant_models.toml_lines import scan_toml_lines

SECTIONS = ("unit", "input", "sensor", "estimate", "disturbance", "transfer_function", "fault_tests")

_POSITION = re.compile(r" \(at (?:line (\d+), column (\d+)|end of document)\)$")
_KEY_BEFORE_EQUALS = re.compile(r"\s*([A-Za-z0-9_.-]+)\s*=")


def read_model_file(path: str | Path) -> UnitSpec:
    """Read and check a model file.

    :raises ModelFileError: every fault in the file, or why it could not be read.
    """
    name = str(path)
    try:
        if Path(path).is_dir():
            raise ModelFileError((Fault(name, 1, "", "expected a model file; this is a directory"),))
        content = Path(path).read_bytes()
    except FileNotFoundError:
        raise ModelFileError((Fault(name, 1, "", "expected a model file; there is no such file"),)) from None
    except (OSError, ValueError) as error:
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise ModelFileError((Fault(name, 1, "", f"expected a readable model file; {reason}"),)) from None
    try:
        text = content.decode("utf-8")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        message = f"expected text in UTF-8; byte {content[error.start]:#04x} at offset {error.start} is none"
        raise ModelFileError((Fault(name, line, "", message),)) from None
    return parse_model_text(text, name)


def parse_model_text(text: str, file_name: str) -> UnitSpec:
    """Check the text of a model file.

    :param file_name: what messages call the file.
    :raises ModelFileError: every fault in the text, by line.
    """
    source = text.removeprefix("\ufeff")
    document = _toml(source, file_name)
    faults = FaultList(file_name, scan_toml_lines(source))
    spec = _unit_spec(document, faults, source)
    found = faults.in_order()
    if found:
        raise ModelFileError(found)
    return spec


def _unit_spec(document: dict[str, Any], faults: FaultList, source: str) -> UnitSpec:
    """The specification; to be used only where no fault was found."""
    unknown_sections(document, SECTIONS, faults)
    named = {key: rows(document, key, faults) for key in ("input", "sensor", "estimate", "disturbance")}
    paths = rows(document, "transfer_function", faults)
    unit = single(document, "unit", faults)
    for section in ("unit", "sensor", "estimate"):
        if not document.get(section):
            brackets = f"[{section}]" if section == "unit" else f"at least one [[{section}]]"
            faults.add((section,), section, f"missing; expected {brackets}")
    name, title, sample_time, late_horizon = read_unit(unit if unit is not None else _empty_unit())
    inputs = tuple(read_input(table) for table in named["input"])
    sensors = tuple(read_sensor(table) for table in named["sensor"])
    about_tests = single(document, "fault_tests", faults)
    tests = read_fault_tests(about_tests, [item.tag for item in sensors])
    spec = UnitSpec(
        name=name,
        title=title,
        sample_time=sample_time,
        inputs=inputs,
        sensors=sensors,
        estimates=tuple(read_estimate(table) for table in named["estimate"]),
        disturbances=tuple(read_disturbance(table) for table in named["disturbance"]),
        paths=tuple(read_path(table) for table in paths),
        false_flag_interval=tests.false_flag_interval,
        leave_out_isolated=tests.leave_out_isolated,
        back_by_itself=tests.back_by_itself,
        widening=tests.widening,
        disarmed=tests.disarmed,
        patient=tests.patient,
        late_horizon=late_horizon,
        source_text=source,
    )
    check_whole(named, paths, faults)
    check_schedules(spec, paths, faults)
    if unit is not None and unit.sound("sample_time"):
        check_dead_times(spec, paths, faults)
        if about_tests is not None:
            check_interval(about_tests, tests, sample_time)
    return spec if len(faults) else _in_operation(spec)


def _in_operation(spec: UnitSpec) -> UnitSpec:
    """Paths with a schedule as they are at the operating point of its tag."""
    scaled = in_model_scale(spec)
    points = operating_points(scaled)
    there = [path_in_operation(path, points) for path in scaled.paths]
    paths = zip(spec.paths, there, strict=True)
    return replace(spec, paths=tuple(replace(now, schedule=path.schedule) for path, now in paths))


def _empty_unit() -> Table:
    """In place of a missing [unit], which is one fault and not three."""
    return Table({"name": "-", "sample_time": "1 s"}, (), FaultList("", scan_toml_lines("")))


def _toml(text: str, file_name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except RecursionError:
        message = "expected TOML; brackets are nested too deep to be read"
        raise ModelFileError((Fault(file_name, 1, "", message),)) from None
    except ValueError as error:
        raise ModelFileError((_syntax_fault(text, file_name, str(error)),)) from None


def _syntax_fault(text: str, file_name: str, reason: str) -> Fault:
    """tomllib's message as a fault: its line, the key of that line, what it says, what was expected."""
    lines = text.replace("\r\n", "\n").removesuffix("\n").split("\n")
    line, where = len(lines), ", at the end of the file"
    position = _POSITION.search(reason)
    if position is None:
        line, where, reason = 1, "", "a number has more digits than can be read"
    elif position[1]:
        line, where = int(position[1]), f", column {position[2]}"
    said = _POSITION.sub("", reason)
    key = _KEY_BEFORE_EQUALS.match(lines[min(line, len(lines)) - 1])
    message = f"expected TOML, as in [unit] or key = value; {said[:1].lower()}{said[1:]}{where}"
    return Fault(file_name, line, key[1] if key and where else "", message.replace("\n", " "))
