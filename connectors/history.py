"""A recorded history as frozen arrays: per tag its readings, in the order of their source times."""

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
