"""The estimator's results against those of the dense filter.

Norm: estimates and predictions relative to the largest deviation from the operating point in the run; standard deviations
relative to themselves, entry by entry; innovations relative to their standard deviation.
"""

from __future__ import annotations

import numpy as np
from independent.dense_filter import DenseResult, known_at_each_cycle, operating_points
from independent.recorded_runs import Run, by_cycle, late_labs, record
from independent.transfer_paths import Array

import softsensor
from plant_models.building import build_plant_model
from plant_models.specification import UnitSpec
from softsensor.recorded_data import ReplayResult

RELATIVE = 1e-8
"""The contract's section 2: estimates, their sd, innovations and their sd agree to 1e-8 relative."""


def agree(found: Array, expected: Array, scale: Array) -> None:
    """Both nan in the same places, and elsewhere no further apart than 1e-8 of the scale."""
    np.testing.assert_array_equal(np.isnan(found), np.isnan(expected))
    apart = np.abs(found - expected) / scale
    assert np.nanmax(apart, initial=0.0) <= RELATIVE


def compare(run: Run, result: ReplayResult, dense: DenseResult) -> None:
    sensors = [item.tag for item in run.spec.sensors]
    estimates = [item.tag for item in run.spec.estimates]
    at_rest = operating_points(run.spec)
    swing = np.abs(dense.estimate - at_rest[len(sensors) :]).max(axis=0)
    agree(by_cycle(result.estimates, "value", estimates), dense.estimate, swing)
    agree(by_cycle(result.estimates, "sd", estimates), dense.sd, dense.sd)
    swing = np.abs(dense.predicted - at_rest[: len(sensors)]).max(axis=0)
    agree(by_cycle(result.innovations, "predicted", sensors), dense.predicted, swing)
    used = by_cycle(result.innovations, "used", sensors) == 1
    np.testing.assert_array_equal(used, dense.used)
    agree(by_cycle(result.innovations, "innovation", sensors), dense.innovation, dense.innovation_sd)
    sd = np.where(np.isfinite(run.y), by_cycle(result.innovations, "sd", sensors), np.nan)
    agree(sd, dense.innovation_sd, dense.innovation_sd)


def compare_labs(result: ReplayResult, dense: DenseResult, values: Array) -> None:
    """Both in order of arrival; sorted by value, since results that arrive in one cycle may change places."""
    table = result.lab_results.sort_values("value")
    order = np.argsort(values)
    assert list(table["status"]) == ["used"] * len(values)
    sd = dense.lab_sd[order]
    agree(table["predicted"].to_numpy(), dense.lab_predicted[order], sd)
    agree(table["sd"].to_numpy(), sd, sd)


def check(spec: UnitSpec, cycles: int, seed: int, results: int, move: float = 1.0) -> None:
    gaps = 0.05 + 0.25 * ((seed * 7) % 20) / 19.0
    run = record(spec, cycles, seed, gaps, move)
    frame, labs = late_labs(run, results, seed, latest=60)
    result = softsensor.replay(build_plant_model(spec), run.history(), frame)
    dense = known_at_each_cycle(spec, run.u, run.y, run.uncertain, labs)
    compare(run, result, dense)
    compare_labs(result, dense, np.array([lab.value for lab in labs]))
