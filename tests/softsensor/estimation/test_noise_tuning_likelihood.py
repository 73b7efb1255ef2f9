"""The likelihood and its derivatives against the dense filter, and against published values of the Nile."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.dense_filter import filter_in_order
from independent.noisy_plants import fit_to, random_noisy_unit, sensor, unit
from independent.random_models import random_unit
from independent.recorded_runs import Run, record
from statsmodels.datasets import nile

from plant_models.building import build_plant_model
from plant_models.specification import DisturbanceSpec, PathSpec, UnitSpec
from softsensor.estimation.noise_tuning.maximum_likelihood import NoiseFit, maximise
from softsensor.estimation.noise_tuning.parameters import noise_parameters, seen_states, with_values


def dense_log_likelihood(spec: UnitSpec, run: Run, theta: np.ndarray) -> float:
    moved = with_values(spec, noise_parameters(spec), np.exp(theta))
    return -filter_in_order(moved, run.u, run.y, run.uncertain).minus_log_l


def start_of(spec: UnitSpec) -> np.ndarray:
    return np.log([item.value for item in noise_parameters(spec)])


@pytest.mark.parametrize("seed", range(4))
def test_the_likelihood_is_the_dense_filters_with_gaps_and_doubtful_readings(seed: int) -> None:
    spec = random_unit(seed)
    run = record(spec, 120, seed, gaps=0.15)
    theta = start_of(spec)

    assert fit_to(spec, run).at(theta).value == pytest.approx(
        dense_log_likelihood(spec, run, theta), rel=1e-10
    )


@pytest.mark.parametrize("seed", [1, 4])
def test_the_gradient_is_that_of_the_dense_filters_likelihood(seed: int) -> None:
    spec = random_unit(seed)
    run = record(spec, 40, seed, gaps=0.1)
    theta, h = start_of(spec) + 0.1, 1e-3
    gradient = fit_to(spec, run).at(theta).gradient
    for j in range(len(theta)):
        unit_step = np.eye(len(theta))[j] * h
        values = [dense_log_likelihood(spec, run, theta + k * unit_step) for k in (-2, -1, 1, 2)]
        weights = np.array([1.0, -8.0, 8.0, -1.0]) / (12.0 * h)
        assert gradient[j] == pytest.approx(float(weights @ values), abs=1e-6 * np.abs(gradient).max())


def test_states_that_no_sensor_sees_are_left_out_and_change_nothing() -> None:
    spec = random_noisy_unit(0)
    part = build_plant_model(spec).stochastic

    assert len(seen_states(spec, part)) < len(part.q)


NILE = np.asarray(nile.load_pandas().data["volume"], dtype=float)


def local_level(noise: float, level: float, initial: float) -> UnitSpec:
    """The local level model: a walk of variance ``level`` a sample, read with noise of variance ``noise``."""
    walk = DisturbanceSpec("level", walk_sd=level**0.5, initial_sd=initial**0.5)
    whole = unit((sensor(0, noise**0.5),), (walk,), (PathSpec("level", "TI0", 1.0),))
    flat = replace(whole.sensors[0], operating_point=0.0)
    paths = tuple(path for path in whole.paths if path.source != "FI1")
    return replace(whole, sample_time=3600.0, sensors=(flat,), paths=paths)


def nile_fit(spec: UnitSpec, first: int) -> tuple[NoiseFit, Run]:
    count = len(NILE)
    none = np.zeros((count, 1), dtype=bool)
    run = Run(spec, np.full((count, 1), 10.0), NILE[:, None], none, np.zeros((count, 2)))
    return fit_to(spec, run, first), run


def test_the_niles_likelihood_with_a_wide_start() -> None:
    """a1 = 0, P1 = 1e7 at (15099, 1469.1): -641.5856 COMPUTED with statsmodels beforehand."""
    fit, _ = nile_fit(local_level(15099.0, 1469.1, 1e7), 0)

    assert fit.at(np.log([15099.0**0.5, 1469.1**0.5])).value == pytest.approx(-641.5856, abs=5e-5)


def test_the_niles_maximum_is_the_published_one() -> None:
    """Durbin & Koopman (2012) sec. 2.10: 15099 and 1469.1 READ; 15098.518, 1469.177 and log L -633.4646 COMPUTED with
    statsmodels' exact diffuse start. Conditional on the first reading ours lacks its -log(2 pi)/2.
    """
    fit, _ = nile_fit(local_level(4000.0, 9000.0, 1e12), 1)
    best = maximise(fit)

    assert best.converged
    assert best.values**2 == pytest.approx([15098.518, 1469.177], rel=2e-4)
    assert best.log_likelihood == pytest.approx(-633.4646 + 0.5 * np.log(2.0 * np.pi), abs=1e-4)


def test_the_observed_information_is_the_curvature_of_the_dense_filters_likelihood() -> None:
    spec = local_level(15099.0, 1469.1, 1e7)
    fit, run = nile_fit(spec, 0)
    theta, h = start_of(spec), 5e-3
    found = fit.observed_information(theta)
    for i, j in ((0, 0), (0, 1), (1, 1)):
        a, b = np.eye(2)[i] * h, np.eye(2)[j] * h
        corners = [(1, a + b), (-1, a - b), (-1, b - a), (1, -a - b)]
        second = sum(sign * dense_log_likelihood(spec, run, theta + move) for sign, move in corners)
        assert found[i, j] == pytest.approx(-second / (4.0 * h * h), abs=1e-3 * np.abs(found).max())
