"""A plant whose gains and time constants go with its flow, under a model that knows it and under one that does not.

    python tests/long_runs/schedules.py [cycles] [runs]

The flow wanders over the whole schedule. The plant is simulated by the dense reference, its matrices made anew for every
flow. The model that does not know has the parameters of the operating point at every flow.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass, replace
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from independent.dense_filter import course, input_driven
from independent.recorded_runs import Run
from independent.transfer_paths import Array

import softsensor
from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.specification import UnitSpec

MODEL = """
[unit]
name = "E-301"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]

[[input]]
tag = "QI1"
unit = "kW"
operating_point = 100.0
range = [0.0, 200.0]

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]

[[disturbance]]
name = "feed"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "QI1"
to = "TI1"
dead_time = "14 s"
schedule = { tag = "FI1", at = [8, 11.5, 15], gain = [0.5, 0.35, 0.27], time_constants = [["6 min"],
["4.2 min"], ["3.2 min"]] }

[[transfer_function]]
from = "FI1"
to = "TI1"
time_constants = ["4 min"]
schedule = { tag = "FI1", at = [8, 15], gain = [-2.5, -1.5] }

[[transfer_function]]
from = "feed"
to = "TI1"
time_constants = ["4.2 min"]
schedule = { tag = "FI1", at = [8, 11.5, 15], gain = [16, 14, 9] }

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.9
time_constants = ["6 min"]
"""
SPEC = parse_model_text(MODEL, "e301.toml")


@dataclass(frozen=True)
class Judged:
    """Of one run: share of cycles with the truth in the 95 % interval, root mean square error, mean nis, flags."""

    coverage: float
    rms: float
    nis: float
    flags: int


def simulated(cycles: int, seed: int) -> Run:
    """Inputs, readings and truth of a right model; 2 % of the readings are missing."""
    rng = np.random.default_rng([41, seed])
    u = np.column_stack([wandering_flow(cycles, rng), 100.0 + np.cumsum(rare_steps(cycles, rng))])
    systems = course(SPEC, u)
    walk = np.sqrt(np.diag(systems[0].Q))
    x = np.linalg.cholesky(systems[0].P0 + 1e-18 * np.eye(len(walk))) @ rng.standard_normal(walk.size)
    z = np.zeros((cycles, 2))
    for k, system in enumerate(systems):
        z[k] = system.C @ x
        x = system.A @ x + walk * rng.standard_normal(walk.size)
    truth = input_driven(SPEC, u) + z
    y = truth[:, :1] + SPEC.sensors[0].noise_sd * rng.standard_normal((cycles, 1))
    y[rng.random((cycles, 1)) < 0.02] = np.nan
    return Run(SPEC, u, y, np.zeros((cycles, 1), dtype=bool), truth)


def wandering_flow(cycles: int, rng: np.random.Generator) -> Array:
    """About the operating point with an sd of 1.6 m3/h and a time constant of 2.8 h, in steps of 0.02 m3/h."""
    flow = np.zeros(cycles)
    for k in range(1, cycles):
        flow[k] = 0.999 * flow[k - 1] + rng.normal(0.0, 0.07)
    return np.clip(11.5 + 0.02 * np.round(flow / 0.02), 8.0, 15.0)


def rare_steps(cycles: int, rng: np.random.Generator) -> Array:
    return np.where(rng.random(cycles) < 0.01, rng.normal(0.0, 2.0, cycles), 0.0)


def judged(run: Run, spec: UnitSpec) -> Judged:
    result = softsensor.replay(build_plant_model(spec), run.history())
    error = result.estimates["value"].to_numpy() - run.truth[:, 1]
    inside = np.abs(error) <= 1.96 * result.estimates["sd"].to_numpy()
    nis = result.summary["sensors"]["TI1"]["nis"]
    return Judged(float(inside.mean()), float(np.sqrt(np.mean(error**2))), float(nis), len(result.flags))


def unknowing(spec: UnitSpec) -> UnitSpec:
    """The parameters of the operating point, always."""
    return replace(spec, paths=tuple(replace(path, schedule=None) for path in spec.paths))


if __name__ == "__main__":
    length = int(sys.argv[1]) if len(sys.argv) > 1 else 30_000
    print("| run | model | truth inside the 95 % interval | rms error | nis | flags |")
    print("|---|---|---|---|---|---|")
    for number in range(1, 1 + (int(sys.argv[2]) if len(sys.argv) > 2 else 3)):
        drawn = simulated(length, number)
        for name, spec in (("with schedules", SPEC), ("without", unknowing(SPEC))):
            row = judged(drawn, spec)
            print(
                f"| {number} | {name} | {row.coverage:.1%} | {row.rms:.4f} mol/L | {row.nis:.3f} | {row.flags} |",
                flush=True,
            )
