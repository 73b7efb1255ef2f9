"""A tag's remembered readings: what is kept when the oldest are let go."""

from __future__ import annotations

import numpy as np
import pytest

from connectors.history import TagSeries
from plant_models.transform import Transform
from softsensor.readings_of_cycle import CycleQuality
from softsensor.service.rules import TagRule
from softsensor.service.series_memory import SeriesMemory


def full(values: np.ndarray) -> SeriesMemory:
    """A memory with as many readings as it holds before it grows, one a microsecond."""
    memory = SeriesMemory()
    times = np.arange(len(values), dtype=np.int64)
    memory.insert(TagSeries(times, values.astype(np.float64), np.zeros(len(values), dtype=np.int8)))
    return memory


@pytest.mark.parametrize("transform", [None, Transform("log")])
def test_the_last_reading_that_can_be_transformed_is_kept(transform: Transform | None) -> None:
    """Of 64 readings those from number 30 on cannot be: an input still holds number 29 when all before 50 are let go."""
    rule = TagRule("FI1", 10, True, transform)
    memory = full(np.where(np.arange(64) < 30, 1.0 + np.arange(64), 0.0))
    before = memory.state_at(49, rule)
    memory.forget(50, [rule])
    assert memory.state_at(49, rule) == before
    assert len(memory) == (15 if transform is None else 35)
    if transform is not None:
        assert (before.usable_time, before.usable_value) == (29, 30.0)
        assert before.newest_quality == CycleQuality.UNMAPPED
