"""A model file's tables while they are read: values out, faults with their lines collected on the way."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any, TypeVar

from plant_models.errors import Fault, UnitError
from plant_models.model_kinds import Kind, RefusalError
from plant_models.quoting import printable, quoted, suggestion
from plant_models.toml_lines import Place, TomlLines

T = TypeVar("T")
D = TypeVar("D")


class FaultList:
    """Collects the faults of one file; the only thing that changes while a file is read."""

    def __init__(self, file: str, lines: TomlLines) -> None:
        self._file = file
        self._lines = lines
        self._faults: list[Fault] = []

    def add(self, place: Place, key: str, message: str) -> None:
        """A fault at a place, under the key that the message shall name."""
        self._faults.append(Fault(self._file, self.line(place), printable(key), message))

    def __len__(self) -> int:
        return len(self._faults)

    def line(self, place: Place) -> int:
        return self._lines.line(*place)

    def in_order(self) -> tuple[Fault, ...]:
        """All faults once, by line; those of one line in the order they were found."""
        return tuple(sorted(dict.fromkeys(self._faults), key=lambda fault: fault.line))


class Table:
    """One TOML table; each value is read by key and kind, and each fault noted where it stands.

    :param prefix: what stands before a key in messages, ``lab.`` in an inline table.
    """

    def __init__(self, values: Mapping[str, Any], place: Place, faults: FaultList, prefix: str = "") -> None:
        self.values = values
        self.place = place
        self.faults = faults
        self._prefix = prefix
        self._unsound: set[str] = set()

    def read(self, key: str, kind: Kind[T], why: str = "") -> T:
        """A value that must be there.

        :param why: added to the message where the key is missing.
        """
        if key not in self.values:
            self.fault(key, f"missing; expected {kind.expected}{why}")
            return kind.stand_in
        return self._converted(key, kind)

    def read_or(self, key: str, kind: Kind[T], default: D) -> T | D:
        """A value that may be left out."""
        return self._converted(key, kind) if key in self.values else default

    def subtable(self, key: str, expected: str) -> Table | None:
        """An inline table that may be left out."""
        if key not in self.values:
            return None
        value = self.values[key]
        if not isinstance(value, dict):
            self.fault(key, f"expected {expected}; got {quoted(value)}")
            return None
        return Table(value, (*self.place, key), self.faults, f"{self._prefix}{key}.")

    def only(self, *known: str) -> None:
        """Every other key is a fault: a misspelt optional key must not be passed over."""
        for key in self.values:
            if key not in known:
                words = ", ".join(known)
                self.fault(key, f"unknown key, expected one of {words}{suggestion(key, known)}")

    def fault(self, key: str, message: str) -> None:
        self._unsound.add(key)
        self.faults.add((*self.place, key), self._prefix + key, message)

    def sound(self, *keys: str) -> bool:
        """Whether no fault was found in any of the keys, so that they may be compared with each other."""
        return self._unsound.isdisjoint(keys)

    def has(self, *keys: str) -> bool:
        """Whether any of the keys is there."""
        return any(key in self.values for key in keys)

    def _converted(self, key: str, kind: Kind[T]) -> T:
        value = self.values[key]
        try:
            return kind.convert(value)
        except RefusalError as refused:
            self.fault(key, kind.refusal(value, str(refused)))
        except UnitError as error:
            self.fault(key, error.lines[0])
        return kind.stand_in


def rows(document: Mapping[str, Any], section: str, faults: FaultList) -> list[Table]:
    """The tables of an array of tables such as ``[[sensor]]``; anything else under that name is a fault."""
    if section not in document:
        return []
    value = document[section]
    if isinstance(value, dict):
        faults.add(
            (section,), section, f"expected [[{section}]] in double brackets, one for each; got one table"
        )
        return [Table(value, (section,), faults)]
    if not isinstance(value, list) or not all(isinstance(item, dict) for item in value):
        faults.add((section,), section, f"expected [[{section}]] tables; got {quoted(value)}")
        return []
    return [Table(item, (section, index), faults) for index, item in enumerate(value)]


def single(document: Mapping[str, Any], section: str, faults: FaultList) -> Table | None:
    """A table such as ``[unit]``; None where it is missing, or something else (a fault)."""
    if section not in document:
        return None
    value = document[section]
    if not isinstance(value, dict):
        faults.add((section,), section, f"expected one table [{section}]; got {_several(value)}")
        return None
    return Table(value, (section,), faults)


def unknown_sections(document: Mapping[str, Any], known: Iterable[str], faults: FaultList) -> None:
    """Every top-level key that is no section of a model file is a fault."""
    words = tuple(known)
    for key in document:
        if key not in words:
            message = f"unknown section, expected one of {', '.join(words)}{suggestion(key, words)}"
            faults.add((key,), key, message)


def _several(value: object) -> str:
    is_array = isinstance(value, list) and all(isinstance(item, dict) for item in value)
    return "double brackets" if is_array else quoted(value)
