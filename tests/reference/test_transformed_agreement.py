"""Units with transforms against the dense filter, which is given transformed numbers and nothing of ours.

The run is drawn in the transformed scale and carried back into engineering units, where a user has it.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from independent.dense_filter import DenseResult, known_at_each_cycle, operating_points
from independent.random_models import random_unit
from independent.recorded_runs import Run, by_cycle, late_labs, record
from independent.scales import (
    forward,
    inverse,
    inverse_slopes,
    local_slope,
    path_with_points,
    transformed_unit,
)  # fmt: skip
from independent.scheduled_units import scheduled_unit
from independent.transfer_paths import Array
from scipy import stats
from scipy.stats import norm

import softsensor
from plant_models.building import build_plant_model
from plant_models.specification import EstimateSpec, InputSpec, PathSpec, SensorSpec, UnitSpec
from plant_models.transform import Transform
from softsensor.recorded_data import ReplayResult

RELATIVE = 1e-8
EVERYTHING = (-1e9, 1e9)
LOG, SQRT = Transform("log"), Transform("sqrt")
RISING = Transform(
    "table", ((-1e4, -2e4), (30.0, 10.0), (50.0, 24.0), (62.0, 40.0), (80.0, 46.0), (1e4, 2e4))
)
FALLING = Transform("table", ((-1e4, 1.5e4), (41.0, 70.0), (50.0, 61.0), (60.0, 30.0), (1e4, -1e4)))
KINDS: tuple[Transform | None, ...] = (LOG, SQRT, RISING, FALLING, None)


def at(item: InputSpec | SensorSpec | EstimateSpec, kind: Transform | None) -> dict[str, object]:
    """The keys of a tag with this transform; noise and bias stay as large in the transformed scale."""
    point = (
        {"log": 3.0, "sqrt": 1600.0, "table": 47.0}[kind.kind] if kind is not None else item.operating_point
    )
    if kind is FALLING:
        point = 50.0
    return {"transform": kind, "operating_point": point, "range": EVERYTHING}


def with_transforms(seed: int, spec: UnitSpec | None = None) -> UnitSpec:
    """A random unit in which input, sensor and estimate have transforms, another mixture for every seed.

    Points of schedules keep their distance from the operating point in the transformed scale.
    """
    spec, rng = random_unit(seed) if spec is None else spec, np.random.default_rng([5, seed])

    def sized(item: object, kind: Transform | None, keys: dict[str, object]) -> dict[str, object]:
        scale = 1.0 if kind is None else abs(local_slope(kind, float(keys["operating_point"])))  # type: ignore[arg-type]
        names = ("noise_sd", "tolerance", "bias_walk_sd", "bias_initial_sd")
        return keys | {name: getattr(item, name) / scale for name in names if hasattr(item, name)}

    def chosen(place: int) -> Transform | None:
        return KINDS[(seed + place) % len(KINDS)] if place == 0 else KINDS[int(rng.integers(len(KINDS)))]

    inputs = tuple(replace(item, **at(item, chosen(i))) for i, item in enumerate(spec.inputs))
    sensors = []
    for i, item in enumerate(spec.sensors):
        kind = chosen(i)
        sensors.append(replace(item, **sized(item, kind, at(item, kind))))
    estimates = []
    for i, estimate in enumerate(spec.estimates):
        kind = chosen(i)
        keys = sized(estimate, kind, at(estimate, kind))
        assert estimate.lab is not None
        scale = 1.0 if kind is None else abs(local_slope(kind, float(keys["operating_point"])))  # type: ignore[arg-type]
        lab = replace(estimate.lab, sd=estimate.lab.sd / scale)
        estimates.append(replace(estimate, **keys, lab=lab))
    paths = tuple(_moved(path, spec.inputs, inputs) for path in spec.paths)
    return replace(spec, inputs=inputs, sensors=tuple(sensors), estimates=tuple(estimates), paths=paths)


def _moved(path: PathSpec, before: tuple[InputSpec, ...], after: tuple[InputSpec, ...]) -> PathSpec:
    if path.schedule is None:
        return path
    j = next(j for j, item in enumerate(before) if item.tag == path.schedule.tag)
    centre = forward(after[j].transform, np.array([after[j].operating_point]))
    at = centre + np.array(path.schedule.at) - before[j].operating_point
    return path_with_points(path, inverse(after[j].transform, at))


def carried_back(spec: UnitSpec, run: Run) -> Run:
    """A run of the transformed unit in engineering units; what lies below a square root's zero is put below zero."""
    n = len(spec.sensors)
    u, y, truth = run.u.copy(), run.y.copy(), run.truth.copy()
    for j, item in enumerate(spec.inputs):
        u[:, j] = inverse(item.transform, run.u[:, j])
    for i, sensor in enumerate(spec.sensors):
        y[:, i] = inverse(sensor.transform, run.y[:, i])
    for row, output in enumerate((*spec.sensors, *spec.estimates)):
        truth[:, row] = inverse(output.transform, run.truth[:, row])
    assert np.array_equal(np.isfinite(y), np.isfinite(run.y)), n
    return Run(spec, u, y, run.uncertain, truth)


def seen(items: tuple[InputSpec, ...] | tuple[SensorSpec, ...], values: Array) -> Array:
    return np.column_stack([forward(item.transform, values[:, j]) for j, item in enumerate(items)])


def held(u: Array) -> Array:
    return np.asarray(pd.DataFrame(u).ffill().to_numpy())


def agree(found: Array, expected: Array, scale: Array) -> None:
    np.testing.assert_array_equal(np.isnan(found), np.isnan(expected))
    assert np.nanmax(np.abs(found - expected) / scale, initial=0.0) <= RELATIVE


def compare(spec: UnitSpec, result: ReplayResult, dense: DenseResult, y: Array) -> None:
    plain = transformed_unit(spec)
    sensors, estimates = [item.tag for item in spec.sensors], [item.tag for item in spec.estimates]
    at_rest = operating_points(plain)
    swing = np.abs(dense.estimate - at_rest[len(sensors) :]).max(axis=0)
    half = norm.ppf(0.975) * dense.sd
    for e, item in enumerate(spec.estimates):
        rising = item.transform is not FALLING
        for name, model in (
            ("value", dense.estimate),
            ("lower", dense.estimate + (-half if rising else half)),
            ("upper", dense.estimate + (half if rising else -half)),
        ):
            expected = inverse(item.transform, model[:, e])
            slope = np.array([1.0 / abs(local_slope(item.transform, raw)) for raw in expected])
            found = by_cycle(result.estimates, name, estimates)[:, e]
            agree(found, expected, swing[e] * slope + 1e-7 * np.abs(expected))
        expected = dense.sd[:, e] * np.abs(inverse_slopes(item.transform, dense.estimate[:, e]))
        smooth = np.isfinite(expected)
        assert smooth.mean() > 0.9
        found = by_cycle(result.estimates, "sd", estimates)[:, e]
        np.testing.assert_allclose(found[smooth], expected[smooth], rtol=1e-6)
    used = by_cycle(result.innovations, "used", sensors) == 1
    np.testing.assert_array_equal(used, dense.used)
    agree(by_cycle(result.innovations, "innovation", sensors), dense.innovation, dense.innovation_sd)
    sd = np.where(np.isfinite(y), by_cycle(result.innovations, "sd", sensors), np.nan)
    agree(sd, dense.innovation_sd, dense.innovation_sd)
    for i, sensor in enumerate(spec.sensors):
        expected = inverse(sensor.transform, dense.predicted[:, i])
        found = by_cycle(result.innovations, "predicted", sensors)[:, i]
        slope = np.array([1.0 / abs(local_slope(sensor.transform, raw)) for raw in expected])
        swing_i = np.abs(dense.predicted[:, i] - at_rest[i]).max()
        agree(found, expected, swing_i * slope + 1e-7 * np.abs(expected))


def check(spec: UnitSpec, seed: int, cycles: int = 160) -> tuple[ReplayResult, DenseResult]:
    plain = transformed_unit(spec)
    drawn = record(plain, cycles, seed, 0.15, move=0.3)
    _, rows = late_labs(drawn, 6, seed, latest=60)
    run = carried_back(spec, drawn)
    frame, labs = late_labs(drawn, 6, seed, latest=60)
    known = []
    for place, row in enumerate(rows):
        item = spec.estimates[row.estimate]
        frame.loc[place, "value"] = inverse(item.transform, np.array([row.value]))[0]
        known.append(labs[place])
    result = softsensor.replay(build_plant_model(spec), run.history(), frame)
    u, y = held(seen(spec.inputs, run.u)), seen(spec.sensors, run.y)
    dense = known_at_each_cycle(plain, u, y, run.uncertain, known)
    compare(spec, result, dense, y)
    table = result.lab_results
    order = [next(k for k, v in enumerate(frame["value"]) if v == value) for value in table["value"]]
    assert list(table["status"]) == ["used"] * len(known)
    agree(table["sd"].to_numpy(), dense.lab_sd[order], dense.lab_sd[order])
    values = np.array([lab.value for lab in known])[order]
    agree(table["innovation"].to_numpy(), values - dense.lab_predicted[order], dense.lab_sd[order])
    for place, at_lab in enumerate(order):
        item = spec.estimates[known[at_lab].estimate]
        expected = inverse(item.transform, dense.lab_predicted[[at_lab]])
        np.testing.assert_allclose(table["predicted"].iloc[place], expected[0], rtol=1e-8)
    return result, dense


@pytest.mark.parametrize("seed", range(1, 16))
def test_units_with_transforms_agree_with_the_dense_filter(seed: int) -> None:
    check(with_transforms(seed), seed)


SCHEDULED = [seed for seed in range(1, 11) if any(path.schedule for path in scheduled_unit(seed).paths)]


@pytest.mark.parametrize("seed", SCHEDULED)
def test_schedules_go_by_the_transformed_tag(seed: int) -> None:
    check(with_transforms(seed, scheduled_unit(seed)), seed)


def test_the_units_have_every_transform_on_every_kind_of_tag() -> None:
    specs = [with_transforms(seed) for seed in range(1, 16)]
    for kind in KINDS:
        assert any(item.transform is kind for spec in specs for item in spec.inputs)
        assert any(item.transform is kind for spec in specs for item in spec.sensors)
        assert any(item.transform is kind for spec in specs for item in spec.estimates)


def test_of_a_log_the_interval_is_that_of_a_lognormal_distribution() -> None:
    spec = with_transforms(5)
    assert spec.estimates[0].transform is LOG
    result, dense = check(spec, 5)
    tag = spec.estimates[0].tag
    truth = stats.lognorm(s=dense.sd[:, 0], scale=np.exp(dense.estimate[:, 0]))
    for name, p in (("lower", 0.025), ("value", 0.5), ("upper", 0.975)):
        found = by_cycle(result.estimates, name, [tag])[:, 0]
        np.testing.assert_allclose(found, truth.ppf(p), rtol=1e-9)
