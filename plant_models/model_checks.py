"""What the tables of a model file must be to each other: names of their own, paths that lead somewhere."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from plant_models.durations import format_duration
from plant_models.model_schedules import scheduling_tags
from plant_models.model_tables import FaultList, Table
from plant_models.quoting import nearest, printable, quoted, suggestion
from plant_models.specification import UnitSpec
from plant_models.toml_lines import Place

_ARTICLE = {
    "input": "an",
    "sensor": "a",
    "estimate": "an",
    "disturbance": "a",
}
MOST_PAST_DISTURBANCES = 2000
"""Sample times of dead time on a path from a disturbance; each is a state of the estimator."""

MOST_PAST_INPUTS = 1_000_000

_NAME_KEY = {"input": "tag", "sensor": "tag", "estimate": "tag", "disturbance": "name"}


@dataclass(frozen=True, slots=True)
class Entry:
    """A named table: an input, a sensor, an estimate or a disturbance."""

    section: str
    name: str
    place: Place
    at_input: str | None = None

    @property
    def key(self) -> str:
        return _NAME_KEY[self.section]


@dataclass(frozen=True, slots=True)
class Path:
    """A transfer function's ends as written, or as likely meant where a tag is unknown."""

    source: str
    target: str
    place: Place
    certain: bool = True
    """Whether both ends are as written."""
    from_disturbance_at: str | None = None
    """The input where a disturbance enters: the path is not in the file but follows from at_input."""


def check_whole(sections: dict[str, list[Table]], paths: list[Table], faults: FaultList) -> None:
    """Every check that needs more than one table; adds to the faults.

    Tables whose own name is missing or no text are left out here: that fault is already noted.
    """
    entries = _entries(sections)
    _check_names(entries, sections["estimate"], faults)
    _check_at_input(entries, faults)
    ends = _check_ends(entries, paths, faults)
    ends += _entering_at_inputs(entries, ends)
    _check_one_path_each(ends, faults)
    _check_driven(entries, ends, scheduling_tags(paths), faults)


def check_dead_times(spec: UnitSpec, paths: list[Table], faults: FaultList) -> None:
    """Dead times are kept as past values, one a sample: for an input in a ring, for a disturbance as states.

    :param paths: the tables of spec.paths, in the same order.
    """
    disturbed = {item.name for item in spec.disturbances} | {item.at_input for item in spec.disturbances}
    for path, table in zip(spec.paths, paths, strict=True):
        most = MOST_PAST_DISTURBANCES if path.source in disturbed else MOST_PAST_INPUTS
        if path.dead_time > most * spec.sample_time:
            table.fault(
                "dead_time",
                f"expected at most {most} sample times of {format_duration(spec.sample_time)}"
                f"{' where a disturbance enters' if path.source in disturbed else ''}; "
                f"got {format_duration(path.dead_time)}",
            )


def _entries(sections: dict[str, list[Table]]) -> list[Entry]:
    found: list[Entry] = []
    for section, key in _NAME_KEY.items():
        for table in sections[section]:
            name, at_input = table.values.get(key), table.values.get("at_input")
            if isinstance(name, str):
                at = at_input if isinstance(at_input, str) and section == "disturbance" else None
                found.append(Entry(section, name, table.place, at))
    return found


def _check_names(entries: list[Entry], estimates: Iterable[Table], faults: FaultList) -> None:
    """Inputs, sensors, estimates, laboratory tags and disturbances share one space of names."""
    named = [(entry.name, (*entry.place, entry.key), entry.key) for entry in entries]
    for table in estimates:
        lab = table.values.get("lab")
        if isinstance(lab, dict) and isinstance(lab.get("tag"), str):
            named.append((lab["tag"], (*table.place, "lab", "tag"), "lab.tag"))
    named.sort(key=lambda item: faults.line(item[1]))
    first: dict[str, int] = {}
    for name, place, key in named:
        if name in first:
            what = key.removeprefix("lab.")
            message = f"expected a {what} of its own; {quoted(name)} is used in line {first[name]} already"
            faults.add(place, key, message)
        first.setdefault(name, faults.line(place))


def _check_at_input(entries: list[Entry], faults: FaultList) -> None:
    inputs = [entry.name for entry in entries if entry.section == "input"]
    for entry in entries:
        if entry.at_input is not None and entry.at_input not in inputs:
            what = _what_it_is(entry.at_input, entries) or suggestion(entry.at_input, inputs)
            faults.add(
                (*entry.place, "at_input"),
                "at_input",
                f"expected an input's tag; got {quoted(entry.at_input)}{what}",
            )


def _check_ends(entries: list[Entry], tables: list[Table], faults: FaultList) -> list[Path]:
    """The ends of every path; unknown ones become what is likely meant, so that one slip is one fault."""
    sources = [entry.name for entry in entries if entry.section in ("input", "disturbance")]
    targets = [entry.name for entry in entries if entry.section in ("sensor", "estimate")]
    found: list[Path] = []
    for table in tables:
        source = _end(table, "from", sources, "an input's tag or a disturbance's name", entries, faults)
        target = _end(table, "to", targets, "a sensor's or an estimate's tag", entries, faults)
        as_written = (source, target) == (table.values.get("from"), table.values.get("to"))
        found.append(Path(source, target, table.place, as_written))
    return found


def _end(
    table: Table, key: str, known: list[str], expected: str, entries: list[Entry], faults: FaultList
) -> str:
    name = table.values.get(key)
    if not isinstance(name, str):
        return ""
    if name in known:
        return name
    if table.sound(key):
        what = _what_it_is(name, entries) or suggestion(name, known)
        faults.add((*table.place, key), key, f"expected {expected}; got {quoted(name)}{what}")
    return nearest(name, known) or ""


def _what_it_is(name: str, entries: list[Entry]) -> str:
    """``, which is a sensor`` where the name is known, but as something else."""
    section = next((entry.section for entry in entries if entry.name == name), None)
    return "" if section is None else f", which is {_ARTICLE[section]} {section}"


def _entering_at_inputs(entries: list[Entry], paths: list[Path]) -> list[Path]:
    """The paths that follow from at_input: from the disturbance to wherever that input leads."""
    inputs = {entry.name for entry in entries if entry.section == "input"}
    return [
        Path(entry.name, path.target, (*entry.place, "at_input"), path.certain, entry.at_input)
        for entry in entries
        if entry.at_input in inputs
        for path in paths
        if path.source == entry.at_input
    ]


def _check_one_path_each(paths: list[Path], faults: FaultList) -> None:
    first: dict[tuple[str, str], Path] = {}
    for path in sorted(paths, key=lambda path: path.from_disturbance_at is not None):
        pair = (path.source, path.target)
        if not path.certain:
            continue
        message = f"expected one path from {printable(path.source)} to {printable(path.target)}"
        known = first.setdefault(pair, path)
        if known is path:
            continue
        if path.from_disturbance_at is None:
            message = f"{message}; the first is in line {faults.line(known.place)}"
            faults.add((*path.place, "to"), "to", message)
        elif known.from_disturbance_at is None:
            at = f"at_input = {quoted(path.from_disturbance_at)} in line {faults.line(path.place)}"
            faults.add((*known.place, "to"), "to", f"{message}; another follows from {at}")


def _check_driven(entries: list[Entry], paths: list[Path], scheduling: set[str], faults: FaultList) -> None:
    sources = {path.source for path in paths} | scheduling
    targets = {path.target for path in paths}
    for entry in entries:
        place, name = (*entry.place, entry.key), printable(entry.name)
        if entry.section in ("input", "disturbance") and entry.name not in sources:
            faults.add(place, entry.key, f"expected a transfer function from {name}; it drives nothing")
        if entry.section in ("sensor", "estimate") and entry.name not in targets:
            faults.add(place, entry.key, f"expected a transfer function to {name}; nothing drives it")
