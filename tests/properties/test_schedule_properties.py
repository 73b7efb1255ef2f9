"""What must hold of units whose transfer functions change with an input, however a run is cut, stopped or late."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from independent.dense_filter import LabRow
from independent.recorded_runs import Run, by_cycle, record
from independent.replaying import Outcome, arrival, design_of, readings_of, replay_in_parts
from independent.scheduled_units import scheduled_unit

import softsensor
from plant_models.specification import PathSpec, UnitSpec
from softsensor.cycle import CycleState, UnitDesign, run_cycles, start
from softsensor.estimation.lab_results import LabArrival
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.checkpoints import FORMAT, Context, pack_state, unpack_state
from softsensor.service.unit_run import slice_readings

CYCLES = 150
SPECS = [scheduled_unit(seed) for seed in (3, 8, 10)]


@cache
def design_for(model: int) -> UnitDesign:
    return design_of(SPECS[model])


@cache
def run_of(model: int) -> Run:
    """Inputs that are never still: every cycle begins in the middle of a change."""
    run = record(SPECS[model], CYCLES, 31 + model, gaps=0.2)
    return replace(run, u=run.u + np.random.default_rng(model).normal(0.0, 0.5, run.u.shape))


def arrivals(run: Run, late: bool) -> list[LabArrival]:
    lab = run.spec.estimates[0].lab
    assert lab is not None
    rows = [(5, 40), (50, 51), (70, 120)]
    n = len(run.spec.sensors)
    return [
        arrival(run.spec, LabRow(cycle, known if late else cycle, 0, float(run.truth[cycle, n]), lab.sd))
        for cycle, known in rows
    ]


@cache
def whole(model: int) -> Outcome:
    return replay_in_parts(design_for(model), readings_of(run_of(model)), arrivals(run_of(model), late=True))


models = st.integers(0, len(SPECS) - 1)


@settings(max_examples=10, deadline=None)
@given(model=models, cuts=st.lists(st.integers(1, CYCLES - 1), max_size=12))
def test_blocks_cut_anywhere_give_the_same_digest(model: int, cuts: list[int]) -> None:
    run = run_of(model)
    cut = replay_in_parts(design_for(model), readings_of(run), arrivals(run, late=True), cuts)
    assert cut.digest == whole(model).digest
    assert cut.estimate.tobytes() == whole(model).estimate.tobytes()


@pytest.mark.parametrize("model", range(len(SPECS)))
def test_one_cycle_at_a_time_gives_the_same_digest(model: int) -> None:
    """As a live service does it."""
    run = run_of(model)
    cut = replay_in_parts(design_for(model), readings_of(run), arrivals(run, late=True), range(1, CYCLES))
    assert cut.digest == whole(model).digest


@pytest.mark.parametrize("model", range(len(SPECS)))
def test_late_results_end_where_results_in_order_end(model: int) -> None:
    run = run_of(model)
    in_order = replay_in_parts(design_for(model), readings_of(run), arrivals(run, late=False))
    assert in_order.estimate[125:].tobytes() == whole(model).estimate[125:].tobytes()
    assert in_order.P.tobytes() == whole(model).P.tobytes()


@pytest.mark.parametrize("stop", [1, 63, 64, 101])
def test_a_checkpoint_in_the_middle_of_a_change_is_gone_on_from_to_the_bit(stop: int) -> None:
    """The design is made anew, as after a restart; a checkpoint holds nothing of the schedule."""
    design, readings = design_for(0), readings_of(run_of(0))
    state = run_to(design, readings, stop)
    blob = pack_state(state, Context(design.model.digest, 0, 0))
    resumed, _ = unpack_state(blob, FORMAT)
    again = design_of(SPECS[0])
    while resumed.next_cycle < CYCLES:
        resumed, _, _ = run_cycles(again, resumed, slice_readings(readings, resumed.next_cycle, CYCLES))
    expected = run_to(design, readings, CYCLES)
    assert resumed.digest == expected.digest
    assert resumed.estimator.x_in.tobytes() == expected.estimator.x_in.tobytes()


def run_to(design: UnitDesign, readings: CycleReadings, stop: int) -> CycleState:
    state = start(design)
    while state.next_cycle < stop:
        state, _, _ = run_cycles(design, state, slice_readings(readings, state.next_cycle, stop))
    return state


def constant(path: PathSpec) -> PathSpec:
    """The path with its schedule's values all what they are at the operating point."""
    schedule = path.schedule
    if schedule is None or path.gain is None:
        return path
    count = len(schedule.at)
    same = replace(schedule, gain=(path.gain,) * count, time_constants=(path.time_constants,) * count)
    return replace(path, schedule=same)


@pytest.mark.parametrize("model", range(len(SPECS)))
def test_a_schedule_of_equal_values_is_the_plain_file(model: int) -> None:
    """To 1e-12 of the largest deviation: other states, another exponential, the same path."""
    spec, run = SPECS[model], run_of(model)
    plain = replace(spec, paths=tuple(replace(path, schedule=None) for path in spec.paths))
    equal = replace(spec, paths=tuple(constant(path) for path in spec.paths))
    one, two = (outcome(item, run) for item in (plain, equal))
    swing = np.abs(one.estimate - [item.operating_point for item in spec.estimates]).max(axis=0)
    assert (np.abs(two.estimate - one.estimate) / swing).max() <= 1e-12
    np.testing.assert_allclose(two.sd, one.sd, rtol=1e-12)


def outcome(spec: UnitSpec, run: Run) -> Outcome:
    return replay_in_parts(design_of(spec), readings_of(replace(run, spec=spec)))


def test_what_the_model_is_at_the_operating_point_is_not_touched_by_running() -> None:
    design = design_for(1)
    before = [part.copy() for part in (design.kernel.phi, design.kernel.c_in, design.kernel.steady)]
    replay_in_parts(design, readings_of(run_of(1)))
    for part, kept in zip((design.kernel.phi, design.kernel.c_in, design.kernel.steady), before, strict=True):
        assert part.tobytes() == kept.tobytes()


def test_an_estimate_is_uncertain_outside_the_schedule_and_says_so() -> None:
    run = run_of(0)
    design = design_for(0)
    (j, (low, high)) = design.scheduled[0]
    outside = (run.u[:, j] < low) | (run.u[:, j] > high)
    table = softsensor.replay(design.model, run.history()).estimates
    first = table[table["tag"] == run.spec.estimates[0].tag]
    said = first["reason"].str.contains(f"{run.spec.inputs[j].tag} is outside the schedule, ", regex=False)
    assert 0 < outside.sum() < CYCLES
    np.testing.assert_array_equal(said.to_numpy(), outside)
    assert set(first["status"][outside]) == {"Uncertain"}


@pytest.mark.parametrize("model", [0, 1])
def test_late_values_of_the_tag_count_where_they_belong(model: int) -> None:
    """The scheduling input is away for thirty cycles and sends what it kept: from then on all is as if it had never been."""
    run, tag = run_of(model), design_for(model).model.spec.inputs[design_for(model).scheduled[0][0]].tag
    whole = run.history()
    history = whole.copy()
    history.loc[50:79, tag] = np.nan
    late = pd.DataFrame({"time": whole["time"][50:80], "tag": tag, "value": whole[tag][50:80]})
    late["arrived_at"] = whole["time"][100]
    plant = design_for(model).model
    found, in_time = (
        by_cycle(result.estimates, "value", plant.estimate_tags)
        for result in (softsensor.replay(plant, history, late=late), softsensor.replay(plant, whole))
    )
    assert found[100:].tobytes() == in_time[100:].tobytes()
    assert found[:50].tobytes() == in_time[:50].tobytes()
    assert found[60:100].tobytes() != in_time[60:100].tobytes()
