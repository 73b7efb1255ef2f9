"""Recorded histories and laboratory results, from CSV or Parquet files or data frames."""

from __future__ import annotations

from connectors.history import History, LateRows, TagSeries
from connectors.history_file import history_from_frame, read_history
from connectors.lab_file import lab_from_frame, read_lab
from connectors.lab_results import LabResults, place_lab
from connectors.late_file import late_from_frame, read_late
from connectors.long_history import LongHistory, open_history

__all__ = [
    "History",
    "LabResults",
    "LateRows",
    "LongHistory",
    "TagSeries",
    "history_from_frame",
    "lab_from_frame",
    "late_from_frame",
    "open_history",
    "place_lab",
    "read_history",
    "read_lab",
    "read_late",
]
