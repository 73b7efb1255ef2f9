"""A recorded history as frozen arrays: per tag its readings, in the order of their source times; and what came late."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Times = NDArray[np.int64]
Values = NDArray[np.float64]
Qualities = NDArray[np.int8]


@dataclass(frozen=True)
class TagSeries:
    """One tag's readings.

    Shapes: times (n,) UTC microseconds, strictly increasing; values (n,) engineering units; qualities (n,)
    codes of
    :class:`connectors.readings.Quality`. An empty cell is no reading, unless its quality is Bad: then its
        value is nan.
    """

    times: Times
    values: Values
    qualities: Qualities

    def __len__(self) -> int:
        return int(self.times.shape[0])


@dataclass(frozen=True)
class History:
    """A recorded history, checked.

    ``first_time`` and ``last_time`` are those of its rows (UTC microseconds), empty ones included;
    ``ignored_columns`` are the columns that no wanted tag accounts for, each named once.
    """

    name: str
    series: Mapping[str, TagSeries]
    first_time: int
    last_time: int
    ignored_columns: tuple[str, ...] = ()

    @property
    def tags(self) -> tuple[str, ...]:
        return tuple(self.series)


@dataclass(frozen=True)
class LateRows:
    """Late readings in the order of their arrival; equal arrivals keep the order of the file.

    Shapes, all (n,): times and arrived int64 UTC microseconds; tag_index int64 into ``tags``; values float64 in the tag's
    unit, nan where Bad; qualities int8 codes of Quality. ``ignored_tags`` are those that no wanted tag accounts for.
    """

    name: str
    tags: tuple[str, ...]
    times: NDArray[np.int64]
    arrived: NDArray[np.int64]
    tag_index: NDArray[np.int64]
    values: NDArray[np.float64]
    qualities: NDArray[np.int8]
    ignored_tags: tuple[str, ...] = ()

    def __len__(self) -> int:
        return int(self.times.shape[0])

    @property
    def longest(self) -> float:
        """The longest way back, in seconds."""
        return float((self.arrived - self.times).max(initial=0)) * 1e-6
