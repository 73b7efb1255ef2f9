"""Random units from a seed: every kind of path, disturbance and offset that a model file can describe."""

from __future__ import annotations

import numpy as np

from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    LabSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)

SAMPLE_TIMES = (0.5, 1.0, 2.0, 5.0, 7.0, 10.0, 12.5, 30.0, 60.0)
WIDE = (-1e6, 1e6)
INPUT_FORMS = (
    "static", "first", "first", "second", "lead", "inverse", "biproper", "underdamped", "polynomial", "integrating",
)  # fmt: skip
DISTURBANCE_FORMS = ("static", "first", "first", "second", "inverse", "biproper", "underdamped", "polynomial")


def random_unit(seed: int) -> UnitSpec:
    """1-3 inputs, 1-4 sensors, 1-2 estimates, 1-3 disturbances; stable but for integrators behind inputs."""
    rng = np.random.default_rng([20261201, seed])
    Ts = float(rng.choice(SAMPLE_TIMES))
    inputs = tuple(
        InputSpec(f"FI{i}", "m3/h", _number(rng, 5.0, 50.0), WIDE) for i in range(1, rng.integers(1, 4) + 1)
    )
    sensors = tuple(_sensor(rng, i) for i in range(1, rng.integers(1, 5) + 1))
    estimates = tuple(_estimate(rng, i) for i in range(1, rng.integers(1, 3) + 1))
    count = int(rng.integers(1, 4))
    disturbances = tuple(_disturbance(rng, i, Ts, inputs) for i in range(1, count + 1))
    outputs = [sensor.tag for sensor in sensors] + [estimate.tag for estimate in estimates]
    paths = []
    for source in (item.tag for item in inputs):
        for tag in outputs:
            if rng.random() < 0.7:
                paths.append(_path(rng, source, tag, Ts, INPUT_FORMS))
    own = [item.name for item in disturbances if item.at_input is None]
    for name in own:
        for tag in outputs:
            if rng.random() < 0.7 or name == own[0]:
                paths.append(_path(rng, name, tag, Ts, DISTURBANCE_FORMS))
    return UnitSpec(
        f"U-{seed}", "random", Ts, inputs, sensors, estimates, disturbances, tuple(paths), 30.0 * 86400.0
    )


def _number(rng: np.random.Generator, low: float, high: float) -> float:
    return float(rng.uniform(low, high))


def _sensor(rng: np.random.Generator, i: int) -> SensorSpec:
    walks = rng.random() < 0.25
    noise = _number(rng, 0.05, 0.5)
    return SensorSpec(
        f"TI{i}",
        "degC",
        _number(rng, 20.0, 200.0),
        WIDE,
        noise,
        4.0 * noise,
        bias_walk_sd=_number(rng, 0.01, 0.5) if walks else 0.0,
        bias_initial_sd=_number(rng, 0.01, 0.5) if rng.random() < 0.25 else 0.0,
    )


def _estimate(rng: np.random.Generator, i: int) -> EstimateSpec:
    return EstimateSpec(
        f"AY{i}",
        "mol/L",
        _number(rng, 1.0, 20.0),
        WIDE,
        bias_walk_sd=_number(rng, 0.01, 0.5) if rng.random() < 0.5 else 0.0,
        bias_initial_sd=_number(rng, 0.01, 0.5) if rng.random() < 0.5 else 0.0,
        lab=LabSpec(f"AL{i}", _number(rng, 0.05, 0.3)),
        interval_scale=float(rng.choice([1.0, 1.0, 1.3])),
    )


def _disturbance(
    rng: np.random.Generator, i: int, Ts: float, inputs: tuple[InputSpec, ...]
) -> DisturbanceSpec:
    """The first enters through paths of its own; later ones may enter where an input does."""
    name = f"disturbance {i}"
    at = str(rng.choice([item.tag for item in inputs])) if i > 1 and rng.random() < 0.6 else None
    if rng.random() < 0.35:
        per_sample = _number(rng, 0.02, 0.1)
        return DisturbanceSpec(
            name,
            walk_sd=per_sample * float(np.sqrt(3600.0 / Ts)),
            initial_sd=_number(rng, 0.0, 1.0),
            at_input=at,
        )
    return DisturbanceSpec(
        name, sd=_number(rng, 0.2, 1.0), time_constant=Ts * _number(rng, 2.0, 80.0), at_input=at
    )


def _path(rng: np.random.Generator, source: str, target: str, Ts: float, forms: tuple[str, ...]) -> PathSpec:
    form = str(rng.choice(forms))
    gain = _number(rng, 0.3, 3.0) * float(rng.choice([-1.0, 1.0]))
    fast, slow = Ts * _number(rng, 0.4, 4.0), Ts * _number(rng, 5.0, 40.0)
    delay = Ts * float(rng.choice([0.0, 1.0, 2.0, *rng.uniform(0.0, 4.0, 3)]))
    match form:
        case "static":
            return PathSpec(source, target, gain, dead_time=delay if rng.random() < 0.5 else 0.0)
        case "first":
            return PathSpec(source, target, gain, (slow,), (), delay)
        case "second":
            return PathSpec(source, target, gain, (slow, slow if rng.random() < 0.3 else fast), (), delay)
        case "lead":
            return PathSpec(source, target, gain, (slow, fast), (2.0 * fast,), delay)
        case "inverse":
            return PathSpec(source, target, gain, (slow, fast), (-3.0 * fast,), delay)
        case "biproper":
            return PathSpec(source, target, gain, (slow,), (fast,), delay)
        case "integrating":
            lags = (slow,)[: int(rng.integers(0, 2))]
            return PathSpec(source, target, 0.05 * gain / Ts, lags, (), delay, True)
        case "underdamped":
            damping = _number(rng, 0.15, 0.9)
            return _polynomial(source, target, (gain,), (slow**2, 2.0 * damping * slow, 1.0), delay)
        case _:
            denominator = (2.0 * slow * fast, 2.0 * slow + fast, 2.0)
            return _polynomial(source, target, (gain * fast, -gain), denominator, delay)


def _polynomial(
    source: str, target: str, numerator: tuple[float, ...], denominator: tuple[float, ...], delay: float
) -> PathSpec:
    return PathSpec(source, target, dead_time=delay, numerator=numerator, denominator=denominator)
