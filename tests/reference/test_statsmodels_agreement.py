"""The estimator against statsmodels' Kalman filter: a third party's recursion on the dense model's matrices.

The input-driven part is subtracted first, since statsmodels knows no held inputs. Laboratory results come in order,
as further rows of the same observation. Source: statsmodels, tsa.statespace (COMPUTED in the same run).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from independent.dense_filter import LabRow, filter_in_order, input_driven, stochastic
from independent.random_models import random_unit
from independent.recorded_runs import Run, by_cycle, lab_frame, record
from independent.transfer_paths import Array
from statsmodels.tsa.statespace.kalman_filter import FilterResults, KalmanFilter

import softsensor
from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.specification import UnitSpec

RELATIVE = 1e-8


@dataclass(frozen=True)
class Outside:
    """What statsmodels says, (N, n) each: estimates with sd, innovations with sd, and the log-likelihood."""

    estimate: Array
    sd: Array
    innovation: Array
    innovation_sd: Array
    log_likelihood: float


def by_statsmodels(run: Run, labs: Array) -> Outside:
    """``labs`` (N, n_estimates): laboratory results at their cycles, nan elsewhere."""
    spec, model = run.spec, stochastic(run.spec)
    mean, n_sensors = input_driven(spec, run.u), len(spec.sensors)
    readings = np.hstack([run.y, labs]) - mean
    count, rows = readings.shape
    noise = np.array([item.noise_sd for item in spec.sensors])
    sds = np.ones((rows, count))
    sds[:n_sensors] = (noise * np.where(run.uncertain, 3.0, 1.0)).T
    sds[n_sensors:] = np.array([item.lab.sd if item.lab else 1.0 for item in spec.estimates])[:, None]
    size = len(model.A)
    peer = KalmanFilter(
        k_endog=rows,
        k_states=size,
        transition=model.A,
        design=model.C,
        selection=np.eye(size),
        state_cov=model.Q,
        tolerance=0.0,
    )
    peer.bind(np.ascontiguousarray(readings))
    peer["obs_cov"] = np.stack([np.diag(column**2) for column in sds.T], axis=2)
    peer.initialize_known(np.zeros(size), np.ascontiguousarray(model.P0))
    found: FilterResults = peer.filter()
    E = model.C[n_sensors:]
    estimate = mean[:, n_sensors:] + found.filtered_state.T @ E.T
    variance = np.einsum("ei,ijk,ej->ke", E, found.filtered_state_cov, E)
    scale = np.array([item.interval_scale for item in spec.estimates])
    spread = np.sqrt(np.diagonal(found.forecasts_error_cov, axis1=0, axis2=1))
    return Outside(
        estimate,
        np.sqrt(variance) * scale,
        found.forecasts_error.T[:, :n_sensors],
        spread[:, :n_sensors],
        float(found.llf_obs.sum()),
    )


def specs() -> list[UnitSpec]:
    wood_berry = softsensor.load_model(str(published_model_path("wood_berry"))).spec
    return [wood_berry, *(random_unit(seed) for seed in (1, 3, 6, 8, 12, 20))]


def in_order_labs(run: Run, seed: int) -> tuple[Array, list[tuple[float, float, str, float]]]:
    """A result of each estimate now and then, reported in its own cycle."""
    rng = np.random.default_rng(seed)
    labs = np.full((len(run.u), len(run.spec.estimates)), np.nan)
    rows = []
    for e, item in enumerate(run.spec.estimates):
        assert item.lab is not None
        for k in sorted(rng.choice(len(run.u), 8, replace=False)):
            labs[k, e] = run.truth[k, len(run.spec.sensors) + e] + item.lab.sd * rng.standard_normal()
            rows.append((float(k), float(k), item.lab.tag, float(labs[k, e])))
    return labs, rows


@pytest.mark.parametrize("spec", specs(), ids=lambda spec: spec.name)
@pytest.mark.parametrize("with_labs", [False, True], ids=["no labs", "labs in order"])
def test_statsmodels_gives_the_same_numbers(spec: UnitSpec, with_labs: bool) -> None:
    run = record(spec, 200, 11, gaps=0.15, move=0.03 if spec.name == "C-410" else 1.0)
    labs, rows = in_order_labs(run, 4)
    if not with_labs:
        labs, rows = np.full_like(labs, np.nan), []
    outside = by_statsmodels(run, labs)
    result = softsensor.replay(
        build_plant_model(spec), run.history(), lab_frame(spec, rows) if rows else None
    )
    assert len(result.lab_results) == len(rows)
    assert set(result.lab_results["status"]) <= {"used"}
    sensors, estimates = [s.tag for s in spec.sensors], [e.tag for e in spec.estimates]
    used = np.isfinite(run.y)
    value = by_cycle(result.estimates, "value", estimates)
    swing = np.abs(value - np.array([e.operating_point for e in spec.estimates])).max(axis=0)
    assert (np.abs(value - outside.estimate) / swing).max() <= RELATIVE
    np.testing.assert_allclose(
        by_cycle(result.estimates, "sd", estimates), outside.sd, rtol=RELATIVE, atol=0.0
    )
    innovation = by_cycle(result.innovations, "innovation", sensors)
    apart = np.abs(innovation - outside.innovation) / outside.innovation_sd
    assert apart[used].max() <= RELATIVE
    sd = by_cycle(result.innovations, "sd", sensors)
    np.testing.assert_allclose(sd[used], outside.innovation_sd[used], rtol=RELATIVE, atol=0.0)


def test_the_innovations_of_one_sensor_have_statsmodels_log_likelihood() -> None:
    """With one sensor the innovations are independent, so their densities multiply to the likelihood."""
    spec = softsensor.load_model(str(published_model_path("wood_berry"))).spec
    run = record(spec, 400, 12, gaps=0.2, move=0.03)
    outside = by_statsmodels(run, np.full((400, 1), np.nan))
    table = softsensor.replay(build_plant_model(spec), run.history()).innovations
    table = table[table["used"] == 1]
    standardised, sd = table["innovation"] / table["sd"], table["sd"]
    found = float((-0.5 * (np.log(2.0 * np.pi * sd**2) + standardised**2)).sum())
    assert found == pytest.approx(outside.log_likelihood, rel=RELATIVE)


def test_the_dense_filter_has_statsmodels_log_likelihood_with_several_sensors_and_labs() -> None:
    """The yardstick itself against a third party."""
    spec = random_unit(8)
    run = record(spec, 200, 13, gaps=0.2)
    labs, _ = in_order_labs(run, 6)
    rows = [
        LabRow(int(k), int(k), int(e), float(labs[k, e]), item.lab.sd)
        for k, e in np.argwhere(np.isfinite(labs))
        if (item := spec.estimates[e]).lab is not None
    ]
    dense = filter_in_order(spec, run.u, run.y, run.uncertain, rows)
    assert -dense.minus_log_l == pytest.approx(by_statsmodels(run, labs).log_likelihood, rel=RELATIVE)


def test_a_wrong_noise_shows() -> None:
    """The comparison can fail: ten percent more noise in the model moves the sd by far more than the tolerance."""
    spec = random_unit(1)
    run = record(spec, 100, 14)
    louder = replace(spec, sensors=tuple(replace(s, noise_sd=1.1 * s.noise_sd) for s in spec.sensors))
    outside = by_statsmodels(run, np.full((100, len(spec.estimates)), np.nan))
    result = softsensor.replay(build_plant_model(louder), run.history())
    sd = by_cycle(result.estimates, "sd", [e.tag for e in spec.estimates])
    assert np.abs(sd / outside.sd - 1.0).max() > 1e-3
