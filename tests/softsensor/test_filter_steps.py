"""The loop's two ways through a cycle, against the plain recursion that goes over all of P at every reading: bit for bit."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from benchmarks.measuring import dense_unit, drawn, drawn_from
from independent.replaying import readings_of

import softsensor
from plant_models.library import published_model_path, published_models
from softsensor.block_arrays import BlockInputs, empty_outputs
from softsensor.compiled_cycle import run_block
from softsensor.cycle import start, unit_tests
from softsensor.estimation.eight_states import eight_states
from softsensor.estimation.input_driven import accept_inputs, advance_input_driven, input_driven_outputs
from softsensor.estimation.kalman import correct, predict, row_mean
from softsensor.estimation.kernel import EstimatorState, Floats, Kernel
from softsensor.layout import LabAtCycle, UnitDesign, block_inputs
from softsensor.unit_design import design_unit

CYCLES = 300
DENSE = ("8 dense states", "5 dense states")


def unit(name: str) -> tuple[UnitDesign, BlockInputs]:
    """A unit with CYCLES cycles: readings missing, readings marked Uncertain, several results in one cycle."""
    if name in DENSE:
        model, system = dense_unit(int(name[0]), 3)
        P0 = 0.5 * (system.P0 + system.P0.T)
        model = replace(model, stochastic=replace(model.stochastic, P0=P0))
        run = drawn_from(model, system, CYCLES)
    else:
        model = softsensor.load_model(str(published_model_path(name)))
        run = drawn(model, CYCLES)
    uncertain = np.random.default_rng(3).random(run.y.shape) < 0.1
    design = design_unit(model)
    value = model.spec.estimates[0].operating_point
    labs = tuple(LabAtCycle(cycle, 0, value, 0.5, cycle, cycle) for cycle in (7, 90, 90, 90, 299))
    readings = readings_of(replace(run, uncertain=uncertain))
    return design, block_inputs(design, start(design).book, 0, readings, labs)


def looped(design: UnitDesign, kernel: Kernel, data: BlockInputs) -> tuple[EstimatorState, list[bytes]]:
    """The state after all cycles, and all that the loop has written."""
    state, out = start(design).estimator.copy(), empty_outputs(CYCLES, kernel, len(data.lab_at))
    known = design.detection.standing(np.ones(kernel.n_sensors, dtype=np.int64))
    tests = unit_tests(design, 1)
    done = run_block(kernel, state, design.detection.tests, tests, known, data, out, False)
    assert done == CYCLES
    return state, [part.tobytes() for part in out]


def plain(design: UnitDesign, data: BlockInputs) -> tuple[EstimatorState, Floats]:
    """The state after all cycles, and the estimates: P corrected as a whole at each reading. The gate lets all through."""
    kernel, state = design.kernel, start(design).estimator.copy()
    n, base = len(kernel.q), np.zeros(kernel.n_sensors + kernel.n_estimates)
    v, K, M, work = np.zeros(n), np.zeros(n), np.zeros((n, n)), np.zeros(len(kernel.steady) + 1)
    estimates = np.zeros((CYCLES, kernel.n_estimates))
    for k in range(CYCLES):
        accept_inputs(kernel, state, data.u[k])
        input_driven_outputs(kernel, state, base)
        taken = [
            (i, data.y[k, i], kernel.r[i] * data.scale[k, i])
            for i in range(kernel.n_sensors)
            if not np.isnan(data.y[k, i])
        ]
        at = np.flatnonzero(data.lab_at == k)
        taken += [(int(data.lab_row[e]), data.lab_value[e], data.lab_variance[e]) for e in at]
        for row, value, r in taken:
            assert correct(kernel, state.x, state.P, row, value - base[row], r, v, K) > 0.0
        for e in range(kernel.n_estimates):
            row = kernel.n_sensors + e
            estimates[k, e] = base[row] + row_mean(kernel, state.x, row)
        advance_input_driven(kernel, state, work)
        predict(kernel, state.x, state.P, v, M)
    return state, estimates


@pytest.mark.parametrize("name", [*DENSE, *published_models()])
def test_the_loop_gives_the_bits_of_the_plain_recursion(name: str) -> None:
    design, data = unit(name)
    state, written = looped(design, design.kernel, data)
    wanted, estimates = plain(design, data)
    assert [part.tobytes() for part in state] == [part.tobytes() for part in wanted]
    assert estimates.tobytes() in written
    assert np.array_equal(state.P, state.P.T)


@pytest.mark.parametrize("name", DENSE)
def test_eight_states_written_out_give_the_bits_of_the_other_way(name: str) -> None:
    design, data = unit(name)
    small, empty = design.kernel.eight, eight_states(np.zeros((9, 9)), np.zeros((0, 9)), np.zeros(9), False)
    assert len(small.q) == 8
    assert len(empty.q) == 0
    state, written = looped(design, design.kernel, data)
    other, otherwise = looped(design, design.kernel._replace(eight=empty), data)
    assert [part.tobytes() for part in state] == [part.tobytes() for part in other]
    assert written == otherwise


def test_a_model_with_schedules_or_nine_states_is_not_written_out() -> None:
    A, C, q = np.eye(3) * 0.9, np.ones((1, 3)), np.ones(3)
    assert len(eight_states(A, C, q, scheduled=False).q) == 8
    assert len(eight_states(A, C, q, scheduled=True).q) == 0
    assert len(eight_states(np.eye(9), np.ones((1, 9)), np.ones(9), scheduled=False).q) == 0
