"""Errors of the outside world, mapped from library errors at the connector. The tree is in plant_models.errors."""

from __future__ import annotations

from plant_models.errors import Problem


class ConnectorError(Problem):
    """Something outside did not do what it should."""


class HistoryFileError(ConnectorError):
    """A recorded history that cannot be used; says file, row, column and what was expected."""


class LabFileError(ConnectorError):
    """A file of laboratory results that cannot be used."""


class PlantConnectionError(ConnectorError):
    """The plant's OPC UA server does not answer, or refuses us."""


class NodeError(ConnectorError):
    """A node id that does not parse, or does not exist on the plant's server."""
