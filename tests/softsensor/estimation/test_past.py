"""What a run remembers: the same states, readings and estimates however its cycles were cut into stretches."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.random_models import random_unit
from independent.recorded_runs import record, spoilt
from independent.replaying import design_of, readings_of

from softsensor.cycle import UnitDesign, start
from softsensor.estimation.kernel import CHUNK, EstimatorState
from softsensor.estimation.past import Past
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.unit_run import UnitRun, slice_readings

SPEC = random_unit(6)
CYCLES = 1000
HORIZON = 300


@pytest.fixture(scope="module")
def design() -> UnitDesign:
    return design_of(replace(SPEC, leave_out_isolated=True))


@pytest.fixture(scope="module")
def readings() -> CycleReadings:
    return readings_of(spoilt(record(SPEC, CYCLES, 21, gaps=0.1), 21))


def run_in(design: UnitDesign, readings: CycleReadings, length: int, first: int = 0) -> UnitRun:
    """A run over all cycles, handed over ``length`` at a time."""
    past = Past(HORIZON, design.kernel.n_estimates)
    past.next_cycle = first
    run = UnitRun(design, start(design, first), past)
    for row in range(0, len(readings), length):
        run.advance(slice_readings(readings, row, min(row + length, len(readings))))
    return run


def as_bytes(state: EstimatorState) -> list[bytes]:
    return [np.ascontiguousarray(part).tobytes() for part in state]


@pytest.mark.parametrize("length", [1, 63, 64, 65, CYCLES])
@pytest.mark.parametrize("first", [0, 640])
def test_stretches_leave_the_same_memory(
    design: UnitDesign, readings: CycleReadings, length: int, first: int
) -> None:
    expected, found = run_in(design, readings, 7, first), run_in(design, readings, length, first)
    assert found.past.first_cycle == expected.past.first_cycle
    begin, end = found.past.first_cycle, first + CYCLES
    assert begin % CHUNK == 0
    assert HORIZON <= end - begin <= HORIZON + 2 * CHUNK
    assert found.state.digest.hexdigest() == expected.state.digest.hexdigest()
    for cycle in range(begin, end, CHUNK):
        ours, theirs = found.past.state_before(cycle), expected.past.state_before(cycle)
        assert ours is not None
        assert theirs is not None
        assert ours[0] == theirs[0] == cycle
        assert as_bytes(ours[1]) == as_bytes(theirs[1])
        stop = min(cycle + CHUNK, end)
        seen = found.past.readings_between(cycle, stop)
        np.testing.assert_array_equal(seen.y, readings.y[cycle - first : stop - first])
        np.testing.assert_array_equal(seen.times, readings.times[cycle - first : stop - first])
    assert found.past.state_before(begin - CHUNK) is None
    for ours, theirs in zip(found.past.estimates(), expected.past.estimates(), strict=True):
        np.testing.assert_array_equal(ours, theirs)


def test_a_stretch_ends_with_a_chunk_and_within_what_is_asked_for() -> None:
    past = Past(HORIZON, 1)
    assert [past.room(most) for most in (1, 64, 100, 128, 10**9)] == [64, 64, 64, 128, 8192]
    past.next_cycle = 70
    assert [past.room(most) for most in (1, 128)] == [58, 122]
