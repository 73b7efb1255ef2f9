"""Covariance after a million cycles: symmetric to the last bit, positive, and where a dense Riccati iteration puts it.

Run: python tests/benchmarks/long_covariance.py [CYCLES]. Each of our models, and the reactor with noise a thousand times
smaller (the hardest case for a subtraction), with a tenth of the readings missing and a month's worth of them at the end.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[2]))

import numpy as np

from plant_models.building import build_plant_model
from plant_models.library import published_model_path, published_models
from plant_models.model_file import read_model_file
from plant_models.simulators import reactor_model_path
from plant_models.specification import UnitSpec
from softsensor.block_arrays import empty_outputs
from softsensor.compiled_cycle import run_block
from softsensor.cycle import unit_tests
from softsensor.detection.flags import FlagBook
from softsensor.estimation.kernel import EstimatorState, initial_state
from softsensor.layout import block_inputs
from softsensor.readings_of_cycle import CycleReadings
from softsensor.unit_design import design_unit

BLOCK = 20_000


def specs() -> dict[str, UnitSpec]:
    """Our models by name, and one with very precise sensors."""
    found = {name: read_model_file(published_model_path(name)) for name in published_models()}
    reactor = read_model_file(reactor_model_path())
    precise = tuple(replace(item, noise_sd=item.noise_sd * 1e-3) for item in reactor.sensors)
    return found | {"reactor": reactor, "reactor, precise": replace(reactor, sensors=precise)}


def after(spec: UnitSpec, cycles: int, missing: float, state: EstimatorState | None) -> EstimatorState:
    """The state after so many cycles at the operating point, a share of the readings missing."""
    design = design_unit(build_plant_model(spec))
    state = initial_state(design.model, design.kernel) if state is None else state.copy()
    rng, kernel = np.random.default_rng(1), design.kernel
    y = np.tile(kernel.operating_y[: kernel.n_sensors], (BLOCK, 1))
    u, good = np.tile(kernel.operating_u, (BLOCK, 1)), np.zeros((BLOCK, kernel.n_inputs), dtype=np.int8)
    for start in range(0, cycles, BLOCK):
        quality = np.where(rng.random(y.shape) < missing, 3, 0).astype(np.int8)
        times = (start + np.arange(BLOCK, dtype=np.int64)) * design.detection.sample_us
        data = block_inputs(design, FlagBook(), start, CycleReadings(times, u, good, y, quality), ())
        out = empty_outputs(BLOCK, kernel, 0)
        tests = unit_tests(design, 1)
        known = design.detection.standing(np.ones(kernel.n_sensors, dtype=np.int64))
        assert run_block(kernel, state, design.detection.tests, tests, known, data, out, False) == BLOCK
    return state


def main() -> None:
    """Print the worst of each model."""
    cycles = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    for name, spec in specs().items():
        state = after(spec, cycles, 0.1, None)
        silent = after(spec, round(30 * 86400 / spec.sample_time / BLOCK + 0.5) * BLOCK, 1.0, state)
        for when, P in ((f"{cycles} cycles", state.P), ("and a month without readings", silent.P)):
            values = np.linalg.eigvalsh(P)
            print(
                f"{name}, {when}: symmetric {bool(np.array_equal(P, P.T))}, "
                f"smallest / largest eigenvalue {values[0] / values[-1]:.2e}"
            )


if __name__ == "__main__":
    main()
