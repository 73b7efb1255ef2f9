"""Laboratory results as frozen arrays, and which of them a recorded history can use. No files here."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from connectors.time_column import time_text


@dataclass(frozen=True)
class LabResults:
    """Laboratory results in the order of their reports; equal report times keep the order of the file.

    Shapes, all (n,): sampled_at and reported_at int64 UTC microseconds; tag_index int64 into ``tags``; values
    float64 in the tag's engineering unit; time_uncertainty float64 seconds, the standard uncertainty of the
    sampling time, 0 where none is given; rows int64, the file's rows from 1. ``ignored_tags`` and
    ``ignored_columns`` are those that no wanted tag accounts for, each named once.
    """

    name: str
    tags: tuple[str, ...]
    sampled_at: NDArray[np.int64]
    reported_at: NDArray[np.int64]
    tag_index: NDArray[np.int64]
    values: NDArray[np.float64]
    time_uncertainty: NDArray[np.float64]
    rows: NDArray[np.int64]
    ignored_tags: tuple[str, ...] = ()
    ignored_columns: tuple[str, ...] = ()

    def __len__(self) -> int:
        return int(self.values.shape[0])

    def tag(self, result: int) -> str:
        """The tag of one result."""
        return self.tags[int(self.tag_index[result])]

    def only(self, chosen: NDArray[np.bool_] | NDArray[np.intp]) -> LabResults:
        """The chosen results, by a mask or by their places."""
        return replace(
            self,
            sampled_at=self.sampled_at[chosen],
            reported_at=self.reported_at[chosen],
            tag_index=self.tag_index[chosen],
            values=self.values[chosen],
            time_uncertainty=self.time_uncertainty[chosen],
            rows=self.rows[chosen],
        )


def place_lab(lab: LabResults, first_time: int, last_time: int) -> tuple[LabResults, tuple[str, ...]]:
    """Leave out what cycles from ``first_time`` to ``last_time`` can never see, and say so.

    A result counts in the first cycle at or after its sampling, once it is reported. One sampled before the
    first cycle describes a time that the estimator knows nothing of; one sampled or reported after the last
    cycle is in the future.

    :return: the results that can be used, and one note per result left out.
    """
    notes = []
    usable = np.ones(len(lab), dtype=np.bool_)
    for result in range(len(lab)):
        reason = _reason(int(lab.sampled_at[result]), int(lab.reported_at[result]), first_time, last_time)
        if reason:
            usable[result] = False
            notes.append(f"{lab.name}: row {lab.rows[result]}, {lab.tag(result)}: left out, {reason}")
    return lab.only(usable), tuple(notes)


def _reason(sampled_at: int, reported_at: int, first_time: int, last_time: int) -> str | None:
    if sampled_at < first_time:
        return f"sampled at {time_text(sampled_at)}, before the first cycle at {time_text(first_time)}"
    if sampled_at > last_time:
        return f"sampled at {time_text(sampled_at)}, after the last cycle at {time_text(last_time)}"
    if reported_at > last_time:
        return f"reported at {time_text(reported_at)}, after the last cycle at {time_text(last_time)}"
    return None
