"""Errors of the estimator, its service and its records. The whole tree is drawn in plant_models.errors."""

from __future__ import annotations

from plant_models.errors import Problem


class SiteFileError(Problem):
    """A site file that cannot be used; one line per fault."""


class RecordsError(Problem):
    """The database cannot be opened, is from another release, or refused a write."""


class AuditTrailBroken(RecordsError):
    """The audit trail is not whole; says at which entry and how."""


class ReplayError(Problem):
    """A history that a model cannot be run on."""
