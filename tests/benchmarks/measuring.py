"""What the benchmarks share: processor time of several repeats in turn, units to run, recorded data drawn from them."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import replace
from statistics import median

import numpy as np
import pandas as pd
from independent.dense_disturbances import StateSpace, stationary
from independent.recorded_runs import START, Run, record
from independent.transfer_paths import Array

from plant_models.building import build_plant_model
from plant_models.plant_model import PlantModel
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)

MISSING = 0.02
WIDE = (-1e6, 1e6)


def in_turn(works: Mapping[str, Callable[[], object]], repeats: int) -> dict[str, float]:
    """Median processor seconds of each work; the works take turns, so that what disturbs one disturbs all."""
    spent: dict[str, list[float]] = {name: [] for name in works}
    for work in works.values():
        work()
    for _ in range(repeats):
        for name, work in works.items():
            begun = time.process_time()
            work()
            spent[name].append(time.process_time() - begun)
    return {name: median(values) for name, values in spent.items()}


def drawn(model: PlantModel, cycles: int, seed: int = 1) -> Run:
    """A run of the model's own noise with :data:`MISSING` of the readings missing; no reading is Uncertain."""
    run = record(model.spec, cycles, seed, move=0.02)
    rng = np.random.default_rng([5, seed])
    noise = np.array([item.noise_sd for item in model.spec.sensors])
    y = run.truth[:, : noise.size] + noise * rng.standard_normal((cycles, noise.size))
    y[rng.random(y.shape) < MISSING] = np.nan
    return replace(run, y=y, uncertain=np.zeros_like(run.uncertain))


def frame_of(run: Run) -> pd.DataFrame:
    """A time column and a column per tag, no qualities."""
    frame = run.history()
    return frame[[name for name in frame.columns if not name.endswith(".quality")]]


def small_unit(inputs: int, sensors: int, sample_time: float) -> UnitSpec:
    """One disturbance and first-order paths from everything to everything."""
    measured = tuple(InputSpec(f"FI{j}", "m3/h", 10.0, WIDE) for j in range(inputs))
    seen = tuple(SensorSpec(f"TI{i}", "degC", 90.0, WIDE, 0.1, 0.4) for i in range(sensors))
    wanted = (EstimateSpec("AY1", "mol/L", 1.0, WIDE),)
    paths = [
        PathSpec(source, item.tag, 0.5 + 0.1 * place, (sample_time * (8.0 + 3.0 * place),), (), 0.0)
        for source in (*(item.tag for item in measured), "feed")
        for place, item in enumerate((*seen, *wanted))
    ]
    feed = (DisturbanceSpec("feed", sd=1.0, time_constant=60.0 * sample_time),)
    return UnitSpec("U-1", "small", sample_time, measured, seen, wanted, feed, tuple(paths), 30.0 * 86400.0)


def dense_unit(states: int = 8, sensors: int = 3) -> tuple[PlantModel, StateSpace]:
    """A unit whose stochastic part has no entry that is zero in A and C: nothing to exploit."""
    rng = np.random.default_rng(8)
    model = build_plant_model(small_unit(1, sensors, 10.0))
    A = rng.standard_normal((states, states))
    A *= 0.97 / np.abs(np.linalg.eigvals(A)).max()
    q = rng.uniform(0.5, 1.5, states) * 0.01
    C = rng.standard_normal((sensors + 1, states))
    P0 = stationary(A, np.diag(q))
    part = replace(model.stochastic, A=A, q=q, C=C, P0=P0, state_names=tuple(f"x{i}" for i in range(states)))
    return replace(model, stochastic=part), StateSpace(A, np.diag(q), C, P0)


def drawn_from(model: PlantModel, system: StateSpace, cycles: int) -> Run:
    """As :func:`drawn`, from the matrices themselves; the inputs stand still."""
    rng = np.random.default_rng(9)
    x, n = np.linalg.cholesky(system.P0) @ rng.standard_normal(len(system.A)), len(model.spec.sensors)
    walk = np.sqrt(np.diag(system.Q))
    z: Array = np.zeros((cycles, len(system.C)))
    for k in range(cycles):
        z[k] = system.C @ x
        x = system.A @ x + walk * rng.standard_normal(walk.size)
    points = [item.operating_point for item in (*model.spec.sensors, *model.spec.estimates)]
    truth = z + np.array(points)
    y = truth[:, :n] + model.spec.sensors[0].noise_sd * rng.standard_normal((cycles, n))
    y[rng.random(y.shape) < MISSING] = np.nan
    u = np.full((cycles, len(model.spec.inputs)), model.spec.inputs[0].operating_point)
    return Run(model.spec, u, y, np.zeros(y.shape, dtype=bool), truth)


__all__ = ["START", "dense_unit", "drawn", "drawn_from", "frame_of", "in_turn", "small_unit"]
