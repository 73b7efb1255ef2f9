"""The root of the one error tree, and the errors of this package.

::

    Problem                        anything the program tells a user, in lines, without a traceback
    +-- ModelFileError             a model file with one or more faults           (plant_models)
    +-- UnitError                  a unit that does not parse                     (plant_models)
    +-- RealisationError           arithmetic that cannot be done soundly         (plant_models)
    +-- ConnectorError             the outside world                              (connectors.errors)
    |   +-- HistoryFileError, LabFileError
    |   +-- PlantConnectionError, NodeError
    +-- SiteFileError, RecordsError, ...                                          (softsensor.errors)
"""

from __future__ import annotations

from dataclasses import dataclass


class Problem(Exception):
    """Base of every error that is shown to a user.

    :param lines: one line per fault, each saying where it is and what was expected.
    """

    def __init__(self, *lines: str) -> None:
        super().__init__("\n".join(lines))
        self.lines: tuple[str, ...] = lines


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault in a text file: where it is, and what was expected there."""

    file: str
    line: int
    key: str
    message: str

    def __str__(self) -> str:
        where = f"{self.file}:{self.line}"
        return f"{where}: {self.key}: {self.message}" if self.key else f"{where}: {self.message}"


class ModelFileError(Problem):
    """A model file that cannot be used; carries every fault found, in the order of their lines."""

    def __init__(self, faults: tuple[Fault, ...]) -> None:
        super().__init__(*(str(fault) for fault in faults))
        self.faults = faults


class UnitError(Problem):
    """An engineering unit that does not parse."""


class RealisationError(Problem):
    """A model whose arithmetic cannot be done soundly; nothing is repaired silently."""
