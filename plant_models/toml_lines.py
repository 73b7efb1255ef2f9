"""Where each key of a TOML text stands: tomllib gives values without positions.

The scanner only reads texts that tomllib has accepted, so it needs no error handling of its own. It finds
statements, skips values (strings of all four kinds, arrays and tables over several lines) and notes lines.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass

Place = tuple[str | int, ...]
"""A key's place: ``("sensor", 1, "noise_sd")`` is noise_sd of the second ``[[sensor]]``."""


@dataclass(frozen=True, slots=True)
class TomlLines:
    """The line, from 1, of every table header and key of a text."""

    lines: Mapping[Place, int]

    def line(self, *place: str | int) -> int:
        """The line of a place, or of its parent where it has none (a missing key, inside an inline table)."""
        for length in range(len(place), 0, -1):
            found = self.lines.get(place[:length])
            if found is not None:
                return found
        return 1


def scan_toml_lines(text: str) -> TomlLines:
    """Note the line of every table header and key.

    >>> lines = scan_toml_lines('[unit]\\nname = "R-210"\\n\\n[[sensor]]\\ntag = "TI1"\\n')
    >>> lines.line("unit", "name"), lines.line("sensor", 0), lines.line("sensor", 0, "noise_sd")
    (2, 4, 4)

    :param text: a text that tomllib.loads accepts.
    """
    return _Scanner(text).scan()


class _Scanner:
    """One pass over the text; position and line move forward together."""

    def __init__(self, text: str) -> None:
        self._text = text.replace("\r\n", "\n")
        self._at = 0
        self._line = 1
        self._table: Place = ()
        self._counts: dict[Place, int] = {}
        self._lines: dict[Place, int] = {}

    def scan(self) -> TomlLines:
        while self._at < len(self._text):
            char = self._text[self._at]
            if char == "#":
                self._skip_comment()
            elif char == "[":
                self._header()
            elif char in " \t\n":
                self._step(1)
            else:
                self._statement()
        return TomlLines(self._lines)

    def _step(self, count: int) -> None:
        passed = self._text[self._at : self._at + count]
        self._line += passed.count("\n")
        self._at += count

    def _skip_comment(self) -> None:
        end = self._text.find("\n", self._at)
        self._at = len(self._text) if end < 0 else end

    def _header(self) -> None:
        line = self._line
        is_array = self._text.startswith("[[", self._at)
        self._step(2 if is_array else 1)
        parts = self._key(end="]")
        self._step(2 if is_array else 1)
        place: Place = ()
        for depth, part in enumerate(parts):
            place = (*place, part)
            last = depth == len(parts) - 1
            if last and is_array:
                self._counts[place] = self._counts.get(place, 0) + 1
                self._lines.setdefault(place, line)
            if place in self._counts:
                place = (*place, self._counts[place] - 1)
        self._table = place
        self._note(place, line)

    def _statement(self) -> None:
        line = self._line
        place = (*self._table, *self._key(end="="))
        self._step(1)
        self._note(place, line)
        self._skip_value()

    def _note(self, place: Place, line: int) -> None:
        """Note a place, and tables that exist only through it (dotted keys)."""
        for length in range(1, len(place) + 1):
            self._lines.setdefault(place[:length], line)
        self._lines[place] = line

    def _key(self, end: str) -> tuple[str, ...]:
        """The parts of a bare, quoted or dotted key, up to ``end``; the escapes are tomllib's business."""
        start = self._at
        while self._text[self._at] != end:
            if self._text[self._at] in "\"'":
                self._skip_string()
            else:
                self._step(1)
        node: object = tomllib.loads(f"{self._text[start : self._at]} = 0")
        parts: list[str] = []
        while isinstance(node, dict):
            part, node = next(iter(node.items()))
            parts.append(part)
        return tuple(parts)

    def _skip_value(self) -> None:
        """To the end of the statement: the first line end outside strings and brackets."""
        depth = 0
        while self._at < len(self._text):
            char = self._text[self._at]
            if char in "\"'":
                self._skip_string()
                continue
            if char == "#":
                self._skip_comment()
                continue
            if char == "\n" and depth == 0:
                return
            depth += (char in "[{") - (char in "]}")
            self._step(1)

    def _skip_string(self) -> None:
        quote = self._text[self._at]
        mark = quote * 3 if self._text.startswith(quote * 3, self._at) else quote
        self._step(len(mark))
        while not self._text.startswith(mark, self._at):
            escaped = quote == '"' and self._text[self._at] == "\\"
            self._step(2 if escaped else 1)
        self._step(len(mark))
        while len(mark) == 3 and self._text.startswith(quote, self._at):
            self._step(1)
