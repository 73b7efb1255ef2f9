"""Smoothed estimates against conditioning on everything at once, against statsmodels' smoother, and on the Nile.

Norm: values relative to the largest deviation from the operating point in the run; standard deviations relative to
themselves, entry by entry.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from independent.batch_conditioning import given_everything
from independent.dense_filter import LabRow, input_driven, stochastic
from independent.random_models import random_unit
from independent.recorded_runs import START, Run, by_cycle, lab_frame, late_labs, record
from independent.transfer_paths import Array
from statsmodels.datasets import nile
from statsmodels.tsa.statespace.kalman_smoother import KalmanSmoother

import softsensor
from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)
from softsensor.recorded_data import ReplayResult

RELATIVE = 1e-8
WIDE = (-1e9, 1e9)


def published(name: str) -> UnitSpec:
    return softsensor.load_model(str(published_model_path(name))).spec


def smoothed(run: Run, labs: pd.DataFrame | None) -> tuple[Array, Array]:
    result: ReplayResult = softsensor.replay(build_plant_model(run.spec), run.history(), labs, smooth=True)
    assert list(result.lab_results["status"]) == ["used"] * (0 if labs is None else len(labs))
    assert result.smoothed is not None
    tags = [item.tag for item in run.spec.estimates]
    return by_cycle(result.smoothed, "value", tags), by_cycle(result.smoothed, "sd", tags)


def agree(run: Run, found: tuple[Array, Array], expected: tuple[Array, Array]) -> None:
    rest = np.array([item.operating_point for item in run.spec.estimates])
    swing = np.abs(expected[0] - rest).max(axis=0)
    assert (np.abs(found[0] - expected[0]) / swing).max() <= RELATIVE
    np.testing.assert_allclose(found[1], expected[1], rtol=RELATIVE, atol=0.0)


def check(spec: UnitSpec, cycles: int, seed: int, results: int, move: float = 1.0) -> None:
    run = record(spec, cycles, seed, gaps=0.05 + 0.25 * ((seed * 7) % 20) / 19.0, move=move)
    frame, labs = late_labs(run, results, seed, latest=60)
    agree(run, smoothed(run, frame), given_everything(spec, run.u, run.y, run.uncertain, labs))


@pytest.mark.parametrize("seed", range(1, 21))
def test_random_models_agree_with_conditioning_on_everything_at_once(seed: int) -> None:
    """Gaps, Uncertain readings, late laboratory results, dead times of every kind."""
    check(random_unit(seed), 140, seed, 5)


@pytest.mark.parametrize(("name", "results"), [("wood_berry", 5), ("heavy_oil_fractionator", 3)])
def test_published_models_agree_with_conditioning_on_everything_at_once(name: str, results: int) -> None:
    check(published(name), 120, 3, results, move=0.03)


def test_an_outage_is_bridged_from_both_sides() -> None:
    """No reading for 60 cycles, then one sensor less for the rest: still the exact conditional."""
    spec = random_unit(8)
    run = record(spec, 160, 31, gaps=0.1)
    y = run.y.copy()
    y[50:110] = np.nan
    y[110:, 0] = np.nan
    run = replace(run, y=y)
    agree(run, smoothed(run, None), given_everything(spec, run.u, y, run.uncertain))


def test_a_wrong_noise_shows() -> None:
    """The comparison can fail."""
    spec = random_unit(1)
    run = record(spec, 100, 14)
    louder = replace(spec, sensors=tuple(replace(s, noise_sd=1.1 * s.noise_sd) for s in spec.sensors))
    _, expected = given_everything(spec, run.u, run.y, run.uncertain)
    _, found = smoothed(replace(run, spec=louder), None)
    assert np.abs(found / expected - 1.0).max() > 1e-3


def by_statsmodels(run: Run, labs: Array) -> tuple[Array, Array]:
    """Smoothed estimates and sd by statsmodels; ``labs`` (N, n_estimates), nan where there is none."""
    spec, model = run.spec, stochastic(run.spec)
    mean, n_sensors = input_driven(spec, run.u), len(spec.sensors)
    noise = np.array([item.noise_sd for item in spec.sensors]) * np.where(run.uncertain, 3.0, 1.0)
    of_labs = np.tile([item.lab.sd if item.lab else 1.0 for item in spec.estimates], (len(run.u), 1))
    sds = np.hstack([noise, of_labs]).T
    size = len(model.A)
    peer = KalmanSmoother(
        k_endog=len(sds),
        k_states=size,
        transition=model.A,
        design=model.C,
        selection=np.eye(size),
        state_cov=model.Q,
        tolerance=0.0,
    )
    peer.bind(np.ascontiguousarray(np.hstack([run.y, labs]) - mean))
    peer["obs_cov"] = np.stack([np.diag(column**2) for column in sds.T], axis=2)
    peer.initialize_known(np.zeros(size), np.ascontiguousarray(model.P0))
    found = peer.smooth()
    E = model.C[n_sensors:]
    variance = np.einsum("ei,ijk,ej->ke", E, found.smoothed_state_cov, E)
    scale = np.array([item.interval_scale for item in spec.estimates])
    return mean[:, n_sensors:] + found.smoothed_state.T @ E.T, np.sqrt(variance) * scale


@pytest.mark.parametrize("seed", [1, 3, 6, 8, 12, 20])
def test_statsmodels_smoother_gives_the_same_numbers(seed: int) -> None:
    """600 cycles: longer than one chunk of the smoother, and than conditioning on everything can go."""
    spec = random_unit(seed)
    run = record(spec, 600, 11, gaps=0.15)
    rng = np.random.default_rng(seed)
    labs, rows = np.full((600, len(spec.estimates)), np.nan), []
    for e, item in enumerate(spec.estimates):
        assert item.lab is not None
        for k in sorted(rng.choice(600, 8, replace=False)):
            labs[k, e] = run.truth[k, len(spec.sensors) + e] + item.lab.sd * rng.standard_normal()
            rows.append((float(k), float(k), item.lab.tag, float(labs[k, e])))
    agree(run, smoothed(run, lab_frame(spec, rows)), by_statsmodels(run, labs))


def local_level() -> UnitSpec:
    """Durbin & Koopman 2012, sec. 2.2.5: y = level + noise, the level a walk; a cycle an hour stands for a year.

    The exact diffuse start of the source is a start with an sd of 1e7 here: it moves no digit that is compared.
    """
    return UnitSpec(
        "NILE", "local level", 3600.0,
        (InputSpec("FI1", "m3/h", 0.0, WIDE),),
        (SensorSpec("FI2", "m3/h", 0.0, WIDE, float(np.sqrt(15099.0)), 500.0),),
        (EstimateSpec("FY2", "m3/h", 0.0, WIDE),),
        (DisturbanceSpec("level", walk_sd=float(np.sqrt(1469.1)), initial_sd=1e7),),
        (PathSpec("level", "FI2", 1.0), PathSpec("level", "FY2", 1.0), PathSpec("FI1", "FI2", 1.0)),
        30.0 * 86400.0,
    )  # fmt: skip


def nile_level(flow: Array) -> tuple[Array, Array]:
    """Smoothed level and its variance, from a yearly flow with nan where it is missing."""
    spec = local_level()
    no_doubt = np.zeros((len(flow), 1), dtype=bool)
    run = Run(spec, np.zeros((len(flow), 1)), flow[:, None], no_doubt, np.zeros((len(flow), 2)))
    value, sd = smoothed(run, None)
    return value[:, 0], sd[:, 0] ** 2


def nile_flow() -> Array:
    flow: Array = nile.load_pandas().data["volume"].to_numpy(dtype=float, copy=True)
    assert flow.size == 100
    assert flow.sum() == 91935.0
    return flow


def test_the_smoothed_level_of_the_nile() -> None:
    """Durbin & Koopman 2012, sec. 2.4, variances 15099 and 1469.1; values COMPUTED with statsmodels, exact diffuse."""
    value, _ = nile_level(nile_flow())
    expected = [1111.66832, 1110.85766, 999.58522, 950.93009, 798.37029]
    np.testing.assert_allclose(value[[0, 1, 27, 28, 99]], expected, rtol=0.0, atol=1e-5)


def test_the_smoothed_level_of_the_nile_with_years_missing() -> None:
    """Durbin & Koopman 2012, sec. 2.7: observations 21-40 and 61-80 removed; COMPUTED with statsmodels."""
    flow = nile_flow()
    flow[20:40] = np.nan
    flow[60:80] = np.nan
    value, variance = nile_level(flow)
    assert value[29] == pytest.approx(903.42110, abs=1e-5)
    assert variance[29] == pytest.approx(9715.0059, abs=1e-4)


def test_a_level_that_cannot_move_is_the_weighted_mean_of_all_there_is() -> None:
    """Closed form: with walk_sd = 0 every cycle has the mean, weighted by precision, of prior and readings."""
    spec = local_level()
    still = replace(spec.disturbances[0], walk_sd=0.0, initial_sd=80.0)
    spec = replace(spec, disturbances=(still,))
    flow = nile_flow() - 900.0
    flow[::7] = np.nan
    no_doubt = np.zeros((100, 1), dtype=bool)
    run = Run(spec, np.zeros((100, 1)), flow[:, None], no_doubt, np.zeros((100, 2)))
    value, sd = smoothed(run, None)
    seen = flow[np.isfinite(flow)]
    precision = seen.size / 15099.0 + 1.0 / 80.0**2
    np.testing.assert_allclose(value, seen.sum() / 15099.0 / precision, rtol=1e-10)
    np.testing.assert_allclose(sd, 1.0 / np.sqrt(precision), rtol=1e-10)
    assert run.times[0] == START


def test_far_from_both_ends_a_walk_has_the_variance_of_wieners_smoother() -> None:
    """Closed form: the mean over frequency of q r / (q + 2 r (1 - cos w)) is q r / sqrt(q^2 + 4 q r)."""
    q, r = 1469.1, 15099.0
    _, variance = nile_level(np.random.default_rng(3).normal(0.0, 100.0, 20_000))
    expected = q * r / np.sqrt(q * q + 4.0 * q * r)
    np.testing.assert_allclose(variance[300:-300], expected, rtol=1e-10)


def test_a_late_result_changes_the_cycles_before_it_too() -> None:
    """One laboratory result at cycle 70: what was estimated before it moves, by as much as conditioning says."""
    spec = random_unit(6)
    run = record(spec, 120, 40, gaps=0.1)
    lab = spec.estimates[0].lab
    assert lab is not None
    value = float(run.truth[70, len(spec.sensors)] + lab.sd)
    frame = lab_frame(spec, [(70.0, 115.0, lab.tag, value)])
    with_it, without = smoothed(run, frame), smoothed(run, None)
    agree(
        run, with_it, given_everything(spec, run.u, run.y, run.uncertain, [LabRow(70, 115, 0, value, lab.sd)])
    )
    assert (with_it[1][60:80, 0] < without[1][60:80, 0]).all()
