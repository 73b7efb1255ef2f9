"""Plants whose noise can be known: random ones, one by hand, and the wrong numbers that an engineer starts from."""

from __future__ import annotations

import numpy as np
from independent.recorded_runs import Run

from plant_models.building import build_plant_model
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)
from softsensor.estimation.noise_tuning.deviations import deviations
from softsensor.estimation.noise_tuning.maximum_likelihood import NoiseFit
from softsensor.estimation.noise_tuning.parameters import noise_parameters, with_values

WIDE = (-1e6, 1e6)
TS = 10.0


def unit(
    sensors: tuple[SensorSpec, ...], disturbances: tuple[DisturbanceSpec, ...], paths: tuple[PathSpec, ...]
) -> UnitSpec:
    """A unit of one input that moves its first sensor, and one estimate that the first disturbance moves."""
    own = (
        PathSpec("FI1", sensors[0].tag, 1.0, (100.0,), (), 13.0),
        PathSpec(disturbances[0].name, "AY1", 1.0, (100.0,)),
    )
    inputs = (InputSpec("FI1", "m3/h", 10.0, WIDE),)
    estimates = (EstimateSpec("AY1", "mol/L", 1.0, WIDE),)
    return UnitSpec("U", "a unit", TS, inputs, sensors, estimates, disturbances, own + paths, 30.0 * 86400.0)


def sensor(number: int, noise_sd: float = 0.2, bias_walk_sd: float = 0.0) -> SensorSpec:
    return SensorSpec(f"TI{number}", "degC", 50.0, WIDE, noise_sd, 1.0, bias_walk_sd=bias_walk_sd)


def random_noisy_unit(seed: int) -> UnitSpec:
    """1-3 sensors, 1-2 disturbances: each reaches a sensor of its own, and perhaps others, by paths of its own."""
    rng = np.random.default_rng([5, seed])
    sensors = tuple(sensor(i, float(rng.uniform(0.05, 0.3))) for i in range(int(rng.integers(1, 4))))
    disturbances, paths = [], []
    for d in range(int(rng.integers(1, min(len(sensors), 2) + 1))):
        name = f"disturbance {d}"
        if rng.random() < 0.3:
            walk = float(rng.uniform(0.02, 0.08) * np.sqrt(3600.0 / TS))
            disturbances.append(DisturbanceSpec(name, walk_sd=walk, initial_sd=0.3))
        else:
            sd, tau = float(rng.uniform(0.3, 1.0)), float(rng.uniform(5.0, 40.0) * TS)
            disturbances.append(DisturbanceSpec(name, sd=sd, time_constant=tau))
        for i, item in enumerate(sensors):
            if i == d or rng.random() < 0.6:
                lags = (float(rng.uniform(1.0, 15.0) * TS),) if rng.random() < 0.8 else ()
                gain = float(rng.uniform(0.5, 2.0)) * (1.0 if rng.random() < 0.5 else -1.0)
                paths.append(PathSpec(name, item.tag, gain, lags, (), float(rng.choice([0.0, 13.0, 20.0]))))
    return unit(sensors, tuple(disturbances), tuple(paths))


def mistaken(spec: UnitSpec, seed: int, reach: float = 1.0) -> UnitSpec:
    """The same unit with every noise wrong, by factors up to exp(reach) either way."""
    rng = np.random.default_rng([9, seed])
    parameters = noise_parameters(spec)
    values = np.array([item.value for item in parameters])
    return with_values(spec, parameters, values * np.exp(rng.uniform(-reach, reach, len(values))))


def fit_to(spec: UnitSpec, run: Run, first: int = 0) -> NoiseFit:
    """A fit of the noise of ``spec`` to a run."""
    model = build_plant_model(spec)
    scale = np.where(run.uncertain, 9.0, 1.0)
    seen = deviations(model, run.u, run.y, scale, np.zeros(len(run.u), dtype=np.int64))
    return NoiseFit(model, noise_parameters(spec), seen, first)
