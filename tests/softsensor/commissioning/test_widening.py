"""Correlation is measured as it is, the bank is the program's, and a widened one keeps its promise on the true plant."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from independent.dense_filter import stochastic

from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.specification import UnitSpec
from softsensor.commissioning.bank_run import Bank, BankRun
from softsensor.commissioning.correlation import autocovariances, character, spectrum
from softsensor.commissioning.widening import PIECE, memory, simulated, widening
from softsensor.cycle import UnitDesign, rerun, start
from softsensor.detection.cusum import cusum
from softsensor.detection.flags import FlagBook
from softsensor.detection.run_length import average_run_length, decision_interval
from softsensor.estimation.kernel import Floats
from softsensor.readings_of_cycle import CycleReadings
from softsensor.unit_design import design_unit, load_model

PROMISE = 20_000.0


def one_pair(reference: float = 0.5, promise: float = PROMISE) -> Bank:
    interval = decision_interval(reference, promise, clip=4.0)
    return Bank(np.array([reference]), np.array([interval]), 4.0)


def first_order(n: int, rho: float, seed: int, sd: float = 1.0) -> Floats:
    """A first-order autoregression of variance sd^2."""
    noise = np.random.default_rng([seed, 5]).standard_normal(n) * sd * np.sqrt(1.0 - rho**2)
    out = np.empty(n)
    out[0] = noise[0] / np.sqrt(1.0 - rho**2)
    for k in range(1, n):
        out[k] = rho * out[k - 1] + noise[k]
    return out


def test_autocovariances_are_the_mean_products_of_the_pairs_that_are_there() -> None:
    z = first_order(700, 0.6, 1)
    z[np.random.default_rng(2).random(700) < 0.3] = np.nan
    centred = z - np.nanmean(z)
    pairs = [centred[: len(z) - lag] * centred[lag:] for lag in range(8)]
    expected = [np.nanmean(item) * (1.0 - lag / len(z)) for lag, item in enumerate(pairs)]
    assert autocovariances(z, 7) == pytest.approx(expected, rel=1e-9)


def test_the_spectrum_of_a_first_order_autoregression_is_the_textbooks() -> None:
    """S(w) = (1 - rho^2) / (1 - 2 rho cos w + rho^2) (Priestley 1981, MEMORY); Parzen's window leaves little of it out."""
    rho, points = 0.5, 4096
    w = 2.0 * np.pi * np.arange(points // 2 + 1) / points
    exact = (1.0 - rho**2) / (1.0 - 2.0 * rho * np.cos(w) + rho**2)
    assert spectrum(rho ** np.arange(400.0), points) == pytest.approx(exact, rel=2e-3)


@pytest.mark.parametrize(("rho", "published"), [(0.1, 247.0), (0.2, 146.0)])
def test_correlation_shortens_the_run_as_much_as_is_known(rho: float, published: float) -> None:
    """k = 0.5, h = 5: 465 in theory, less under correlation (figures of the project's own methods, COMPUTED)."""
    w = 2.0 * np.pi * np.arange(PIECE // 2 + 1) / PIECE
    density = (1.0 - rho**2) / (1.0 - 2.0 * rho * np.cos(w) + rho**2)
    run = simulated(density, 0.0, Bank(np.array([0.5]), np.array([5.0]), np.inf), 1e6, 3)
    assert run.cycles / run.counts[0] == pytest.approx(published, rel=0.06)


def test_white_innovations_keep_the_exact_run_length_at_every_width() -> None:
    bank = one_pair(promise=5000.0)
    run = simulated(np.ones(PIECE // 2 + 1), 0.0, bank, 3e6, 4)
    for j in (0, 5):
        exact = average_run_length(0.5, float(bank.interval[0] * run.factors[j]), clip=4.0)
        count = int(run.counts[j])
        assert abs(count - run.cycles / exact) < 4.0 * np.sqrt(count)


def test_the_bank_goes_up_and_down_as_a_plain_count_over_the_sums_says() -> None:
    z = first_order(20_000, 0.3, 7)
    z[np.random.default_rng(8).random(len(z)) < 0.1] = np.nan
    reference, interval, factors = np.array([0.4, 1.0]), np.array([5.0, 3.0]), np.array([1.0, 1.3, 1.7])
    run = BankRun(Bank(reference, interval, 4.0), factors)
    for piece in np.array_split(z, 7):
        run.add(np.ascontiguousarray(piece))
    traces = [cusum(z, 0.0, float(k), 1e9, 4.0) for k in reference]
    top = np.max([np.maximum(t.high, t.low) / h for t, h in zip(traces, interval, strict=True)], axis=0)
    for factor, count in zip(factors, run.counts, strict=True):
        up, ups = False, 0
        for value in top:
            if not up and value > factor:
                up, ups = True, ups + 1
            elif up and value < 0.5 * factor:
                up = False
        assert count == ups > 0


def test_white_innovations_are_sound_and_hardly_anything_is_widened() -> None:
    for seed in range(5):
        found, wider = widening(first_order(30_000, 0.0, seed), one_pair(), PROMISE)
        assert found.sound
        assert wider.factor is not None
        assert wider.factor <= 1.1


def test_wide_innovations_and_correlated_ones_are_widened_and_bad_ones_disarmed() -> None:
    wide, wider = widening(first_order(30_000, 0.0, 1, sd=1.15), one_pair(), PROMISE)
    assert not wide.sound
    assert wide.sd_ratio == pytest.approx(1.15, abs=0.02)
    assert wider.before < 0.3 * PROMISE
    assert 1.15 < (wider.factor or 0.0) < 1.6
    found, correlated = widening(first_order(30_000, 0.2, 1), one_pair(), PROMISE)
    assert found.portmanteau < 1e-6
    assert found.lag_one == pytest.approx(0.2, abs=0.02)
    assert correlated.before < 0.3 * PROMISE
    assert 1.2 < (correlated.factor or 0.0) < 1.9
    _, bad = widening(first_order(30_000, 0.62, 1), one_pair(), PROMISE)
    assert bad.factor is None


def test_the_same_data_give_the_same_factor() -> None:
    z = first_order(20_000, 0.15, 3)
    assert widening(z, one_pair(), PROMISE) == widening(z, one_pair(), PROMISE)


def with_time_constants(spec: UnitSpec, factor: float) -> UnitSpec:
    disturbances = [
        replace(item, time_constant=(item.time_constant or 0.0) * factor) for item in spec.disturbances
    ]
    return replace(spec, disturbances=tuple(disturbances))


def innovations(design: UnitDesign, truth: UnitSpec, cycles: int, seed: int) -> Floats:
    """Standardised innovations (cycles, n_sensors) of a filter on readings of the true plant, by the live cycle."""
    rng = np.random.default_rng([seed, 11])
    model: Any = stochastic(truth)
    values, vectors = np.linalg.eigh(model.P0)
    x = vectors @ (np.sqrt(np.clip(values, 0.0, None)) * rng.standard_normal(values.size))
    walk, sensors = np.sqrt(np.diag(model.Q)), len(truth.sensors)
    operating = np.array([item.operating_point for item in truth.sensors])
    noise = np.array([item.noise_sd for item in truth.sensors])
    y = np.empty((cycles, sensors))
    for k in range(cycles):
        y[k] = operating + (model.C @ x)[:sensors]
        x = model.A @ x + walk * rng.standard_normal(walk.size)
    y += noise * rng.standard_normal(y.shape)
    u = np.tile([item.operating_point for item in truth.inputs], (cycles, 1))
    none = np.zeros(u.shape, dtype=np.int8), np.zeros(y.shape, dtype=np.int8)
    readings = CycleReadings(np.arange(cycles, dtype=np.int64), u, none[0], y, none[1])
    _, out = rerun(design, start(design).estimator, FlagBook(), 0, readings, ())
    found: Floats = out.innovation / out.innovation_sd
    return found


@pytest.mark.parametrize("factor", [3.0, 1.0 / 3.0])
def test_with_time_constants_wrong_threefold_a_widened_test_keeps_half_the_promise_at_least(
    factor: float,
) -> None:
    """A short form of tests/long_runs/widening.py: one published model, a promise of 2 d, 20 promises of the true plant."""
    truth = replace(load_model(published_model_path("wood_berry")).spec, false_flag_interval=2.0 * 86400.0)
    design = design_unit(build_plant_model(with_time_constants(truth, factor)))
    tests, promise = design.detection.tests, truth.false_flag_interval / truth.sample_time
    bank = Bank(tests.reference[0], tests.interval[0], tests.clip)
    seen = np.ascontiguousarray(innovations(design, truth, 20_000, 1)[500:, 0])
    found, wider = widening(seen, bank, promise)
    assert not found.sound
    assert wider.factor is not None
    achieved = BankRun(bank, np.array([1.0, max(wider.factor, 1.0 + 1e-9)]))
    achieved.add(np.ascontiguousarray(innovations(design, truth, int(20 * promise), 2)[500:, 0]))
    assert achieved.counts[1] <= 2 * 20
    if factor > 1.0:
        assert achieved.counts[0] > 2 * 20  # without widening the promise is broken


def test_the_memory_covers_the_slowest_sum_of_the_bank() -> None:
    slow, fast = one_pair(0.25), one_pair(1.0)
    both = Bank(
        np.concatenate([slow.reference, fast.reference]), np.concatenate([slow.interval, fast.interval]), 4.0
    )
    assert memory(both) == memory(slow) > memory(fast)


def test_a_mean_that_chance_does_not_explain_is_widened_for() -> None:
    _, wider = widening(first_order(30_000, 0.1, 5) + 0.25, one_pair(), PROMISE)
    _, centred = widening(first_order(30_000, 0.1, 5), one_pair(), PROMISE)
    assert wider.factor is None or wider.factor > 1.1 * (centred.factor or 0.0)
    assert character(first_order(30_000, 0.1, 5) + 0.25, 64).mean == pytest.approx(0.25, abs=0.03)


def test_a_bank_that_never_comes_down_keeps_no_promise() -> None:
    """Innovations off by 0.85 of their sd on average: the bank goes up once and stays; worse data must not look better."""
    z = 0.85 + np.random.default_rng(8).standard_normal(20_000)
    _, wider = widening(z, one_pair(promise=5000.0), 5000.0)
    assert wider.factor is None
    _, slightly = widening(
        0.25 + np.random.default_rng(8).standard_normal(20_000), one_pair(promise=5000.0), 5000.0
    )
    assert slightly.factor is None or slightly.factor > 1.5


def test_the_mean_of_a_stretch_that_is_short_against_the_lags_is_not_taken_off() -> None:
    """White innovations then have a long-run variance of 1 within its error, and not of 0.05."""
    found = [character(np.random.default_rng(seed).standard_normal(10_000), 5000).slow for seed in range(40)]
    assert np.mean(found) == pytest.approx(1.0, abs=0.3)
