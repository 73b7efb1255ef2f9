"""A cycle of ``softsensor.replay`` against a step of statsmodels' Kalman filter: same matrices, same arrays, same run.

    python tests/benchmarks/against_statsmodels.py [cycles] [repeats]

statsmodels runs at its fastest filter-only setting: univariate, memory conserved, the filtered mean kept. The
input-driven part is subtracted for it beforehand, outside the time. Processor time, medians, one thread.

``filter`` is the compiled loop alone, tests off; ``with tests`` the same with all fault tests armed; ``replay`` is the
public function: checks of the frame, assembly, filter, gate, tests, digest, summary and result frames. A model's design
(run lengths, settled filter) is made by its first replay and kept; like compilation it is outside the time.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

if __name__ == "__main__":
    os.environ["OPENBLAS_NUM_THREADS"] = "1"
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from benchmarks.measuring import dense_unit, drawn, drawn_from, frame_of, in_turn
from independent.dense_filter import StateSpace, input_driven, stochastic
from independent.recorded_runs import Run
from independent.replaying import readings_of
from statsmodels.tsa.statespace.kalman_filter import (
    FILTER_UNIVARIATE,
    MEMORY_CONSERVE,
    MEMORY_NO_FILTERED_MEAN,
    KalmanFilter,
)

import softsensor
from plant_models.library import published_model_path
from plant_models.plant_model import PlantModel
from softsensor.block_arrays import empty_outputs
from softsensor.compiled_cycle import run_block
from softsensor.cycle import start
from softsensor.layout import block_inputs
from softsensor.unit_design import design_unit


def peer_of(run: Run, system: StateSpace) -> KalmanFilter:
    """statsmodels' filter on the dense matrices, its data bound."""
    n_sensors, n = run.y.shape[1], len(system.A)
    peer = KalmanFilter(
        k_endog=n_sensors,
        k_states=n,
        transition=system.A,
        design=system.C[:n_sensors],
        selection=np.eye(n),
        state_cov=system.Q,
        obs_cov=np.diag([item.noise_sd**2 for item in run.spec.sensors]),
        tolerance=0.0,
        filter_method=FILTER_UNIVARIATE,
        conserve_memory=MEMORY_CONSERVE & ~MEMORY_NO_FILTERED_MEAN,
    )
    peer.bind(np.ascontiguousarray(run.y - input_driven(run.spec, run.u)[:, :n_sensors]))
    peer.initialize_known(np.zeros(n), np.ascontiguousarray(system.P0))
    return peer


def compare(model: PlantModel, run: Run, system: StateSpace, repeats: int) -> dict[str, float]:
    """Median processor seconds a cycle."""
    design, history, readings, n = design_unit(model), frame_of(run), readings_of(run), len(run.y)
    peer = peer_of(run, system)

    def loop(testing: bool) -> None:
        state = start(design)
        estimator, tests, row = state.estimator.copy(), state.tests.copy(), 0
        data = block_inputs(design, state.book, 0, readings, ())
        out = empty_outputs(n, design.kernel, 0)
        known = design.detection.standing(np.ones(design.kernel.n_sensors, dtype=np.int64))
        while row < n:
            part = data._replace(**{name: getattr(data, name)[row:] for name in CUT})
            row += run_block(
                design.kernel, estimator, design.detection.tests, tests, known, part, out, testing
            )

    spent = in_turn(
        {
            "statsmodels": peer.filter,
            "replay": lambda: softsensor.replay(model, history),
            "filter": lambda: loop(False),
            "with tests": lambda: loop(True),
        },
        repeats,
    )
    return {name: seconds / n for name, seconds in spent.items()}


CUT = ("u", "y", "scale", "use", "doubtful", "quiet")


def table(title: str, spent: dict[str, float], wanted: float) -> str:
    """Ratios; absolute times only to show the order of magnitude."""
    peer, whole = spent["statsmodels"], spent["replay"]
    lines = [title]
    for name, seconds in spent.items():
        lines.append(
            f"  {name:12} {seconds * 1e6:8.2f} us a cycle   {peer / seconds:6.2f} times statsmodels' speed"
        )
    reached = "reached" if peer / whole >= wanted else "NOT reached"
    lines.append(f"  replay wanted {wanted:g} times or more: {peer / whole:.2f}, {reached}")
    lines.append(f"  tests armed cost {spent['with tests'] / spent['filter'] - 1.0:+.0%} of the filter alone")
    return "\n".join(lines)


def main(cycles: int = 20_000, repeats: int = 5) -> dict[str, dict[str, float]]:
    """Run and print both comparisons."""
    fractionator = softsensor.load_model(str(published_model_path("heavy_oil_fractionator")))
    small, system = dense_unit()
    whole = compare(fractionator, drawn(fractionator, cycles), stochastic(fractionator.spec), repeats)
    print(table("heavy-oil fractionator, five temperatures, 2 % missing", whole, 10.0))
    dense = compare(small, drawn_from(small, system, cycles), system, repeats)
    print(table("8 states, 3 sensors, no entry of A or C zero, 2 % missing", dense, 2.0))
    return {"fractionator": whole, "dense": dense}


if __name__ == "__main__":
    main(*(int(word) for word in sys.argv[1:]))
