"""The estimator against a dense textbook filter of our own making, on published and on random models.

Norm, here and below: estimates and predictions relative to the largest deviation from the operating point in the
run; standard deviations relative to themselves, entry by entry; innovations relative to their standard deviation.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.agreement import agree, check, compare
from independent.dense_filter import (
    filter_in_order,
    known_at_each_cycle,
    output_names,
    stochastic,
)
from independent.random_models import random_unit
from independent.recorded_runs import by_cycle, late_labs, record, spoilt
from independent.transfer_paths import rational
from scipy.linalg import solve_discrete_are

import softsensor
from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.specification import UnitSpec

SEEDS = range(1, 21)


def published(name: str) -> UnitSpec:
    return softsensor.load_model(str(published_model_path(name))).spec


@pytest.mark.parametrize(
    ("name", "cycles", "results"), [("wood_berry", 300, 8), ("heavy_oil_fractionator", 120, 4)]
)
def test_published_models_agree_with_a_dense_filter(name: str, cycles: int, results: int) -> None:
    check(published(name), cycles, 3, results, move=0.03)


@pytest.mark.parametrize("seed", SEEDS)
def test_random_models_agree_with_a_dense_filter(seed: int) -> None:
    check(random_unit(seed), 200, seed, 6)


def check_spoilt(spec: UnitSpec, cycles: int, seed: int, move: float = 1.0) -> int:
    """Spikes and steps in the data: the gate of the dense filter against ours; returns how many readings are kept out."""
    run = spoilt(record(spec, cycles, seed, 0.1, move), seed)
    frame, labs = late_labs(run, 5, seed, latest=60)
    result = softsensor.replay(build_plant_model(spec), run.history(), frame)
    used = set(result.lab_results.loc[result.lab_results["status"] == "used", "value"])
    gates = np.array([sensor.gate for sensor in spec.sensors])
    known = [lab for lab in labs if lab.value in used]
    dense = known_at_each_cycle(spec, run.u, run.y, run.uncertain, known, gates)
    compare(run, result, dense)
    return int(np.sum(np.isfinite(run.y) & ~dense.used))


@pytest.mark.parametrize("seed", SEEDS)
def test_gated_readings_agree_with_a_dense_filter_that_has_a_gate(seed: int) -> None:
    assert check_spoilt(random_unit(seed), 200, seed) > 0


@pytest.mark.parametrize("gate", [2.5, 4.0])
def test_a_narrow_gate_that_data_of_a_right_model_meet_often(gate: float) -> None:
    """The rule in all its cases: rows that break, gates that open together."""
    kept_out = 0
    for seed in (2, 6, 11):
        spec = random_unit(seed)
        sensors = tuple(replace(sensor, gate=gate) for sensor in spec.sensors)
        kept_out += check_spoilt(replace(spec, sensors=sensors), 300, seed)
    assert kept_out > 50


def test_the_fractionator_with_spikes_and_steps() -> None:
    assert check_spoilt(published("heavy_oil_fractionator"), 120, 3, 0.01) > 10


def test_the_random_models_cover_what_a_model_file_can_say() -> None:
    specs = [random_unit(seed) for seed in SEEDS]
    paths = [(spec, path) for spec in specs for path in spec.paths]
    shapes = [(rational(path, spec.sample_time), path.dead_time / spec.sample_time) for spec, path in paths]
    assert any(den.size == 1 and delay == 0.0 for (_, den), delay in shapes)
    assert any(den.size == 1 and delay % 1.0 > 0.0 for (_, den), delay in shapes)
    assert any(num.size == den.size > 1 and delay % 1.0 > 0.0 for (num, den), delay in shapes)
    assert any(np.iscomplex(np.roots(den)).any() for (_, den), _ in shapes)
    assert any(num.size > 1 and np.roots(num)[0].real > 0.0 for (num, _), _ in shapes)
    assert any(path.integrating and path.time_constants for _, path in paths)
    assert any(path.integrating and not path.time_constants for _, path in paths)
    assert any(len(set(path.time_constants)) < len(path.time_constants) for _, path in paths)
    disturbances = [item for spec in specs for item in spec.disturbances]
    assert any(item.walk_sd is not None and item.at_input is None for item in disturbances)
    assert any(item.walk_sd is not None and item.at_input is not None for item in disturbances)
    assert any(item.sd is not None and item.at_input is not None for item in disturbances)
    assert any(sensor.bias_walk_sd > 0.0 for spec in specs for sensor in spec.sensors)
    assert len({spec.sample_time for spec in specs}) > 5


def test_disturbances_that_integrate_start_their_integrators_at_zero() -> None:
    """A disturbance at an input with integrating paths, with and without a lag, a lead and a fractional dead time."""
    spec = random_unit(4)
    source = spec.inputs[0].tag
    first = replace(spec.disturbances[0], at_input=None)
    walker = replace(
        first, name="walker", sd=None, time_constant=None, walk_sd=1.0, initial_sd=0.4, at_input=source
    )
    mover = replace(
        first, name="mover", sd=0.5, time_constant=30.0 * spec.sample_time, walk_sd=None, at_input=source
    )
    Ts = spec.sample_time
    kept = tuple(path for path in spec.paths if path.source in (first.name,))
    shape = replace(
        kept[0], source=source, gain=0.05 / Ts, integrating=True, numerator=None, denominator=None
    )
    forms = [
        ((6.0 * Ts,), (), 1.4 * Ts),
        ((), (2.0 * Ts,), 0.7 * Ts),
        ((3.0 * Ts, 9.0 * Ts), (-2.0 * Ts,), 2.0 * Ts),
    ]
    tags = output_names(spec)
    integrating = tuple(
        replace(shape, target=tag, time_constants=lags, lead_times=leads, dead_time=delay)
        for tag, (lags, leads, delay) in zip(tags, forms * 2, strict=False)
    )
    check(replace(spec, disturbances=(first, walker, mover), paths=kept + integrating), 200, 5, 6)


def test_nothing_but_gaps_leaves_what_the_model_says_alone() -> None:
    """No reading ever: the sd is the model's own, and nothing is an innovation."""
    spec = published("wood_berry")
    run = record(spec, 120, 8, gaps=1.0, move=0.03)
    assert np.isnan(run.y).all()
    history = run.history()
    result = softsensor.replay(build_plant_model(spec), history)
    compare(run, result, filter_in_order(spec, run.u, run.y))


def test_an_input_without_news_holds_its_value_and_the_first_cycle_waits_for_every_input() -> None:
    """Contract section 3: an input holds its last value; before each has had one there is no cycle."""
    spec = random_unit(1)
    run = record(spec, 150, 9, gaps=0.1)
    history = run.history()
    silent = np.random.default_rng(5).random(len(history)) < 0.3
    silent[:4] = [True, True, True, False]
    tag = spec.inputs[0].tag
    history.loc[silent, tag] = np.nan
    held = history[[item.tag for item in spec.inputs]].ffill().to_numpy()
    result = softsensor.replay(build_plant_model(spec), history)
    sensors, estimates = [s.tag for s in spec.sensors], [e.tag for e in spec.estimates]
    value = by_cycle(result.estimates, "value", estimates)
    assert np.isnan(value[:3]).all()
    assert set(result.estimates["status"][: 3 * len(estimates)]) == {"Bad"}
    dense = filter_in_order(spec, held[3:], run.y[3:], run.uncertain[3:])
    agree(value[3:], dense.estimate, np.abs(dense.estimate).max(axis=0))
    found = by_cycle(result.innovations, "innovation", sensors)[3:]
    agree(found, dense.innovation, dense.innovation_sd)


@pytest.mark.parametrize("name", ["wood_berry", "heavy_oil_fractionator", "quadruple_tank"])
def test_the_sd_settles_at_the_stabilising_riccati_solution(name: str) -> None:
    """The steady filter by another algorithm: scipy's ordered QZ solution of the algebraic Riccati equation."""
    spec = published(name)
    sensors = tuple(replace(sensor, gate=100.0) for sensor in spec.sensors)
    spec = replace(
        spec, sensors=sensors
    )  # a tenth of the readings has three times the noise that is supposed here
    model, n = stochastic(spec), len(spec.sensors)
    C, R = model.C[:n], np.diag([item.noise_sd**2 for item in spec.sensors])
    predicted = solve_discrete_are(model.A.T, C.T, model.Q, R)
    S = C @ predicted @ C.T + R
    corrected = predicted - predicted @ C.T @ np.linalg.solve(S, C @ predicted)
    E = model.C[n:]
    run = record(spec, 1500, 17, gaps=0.0, move=0.0)
    run = replace(run, uncertain=np.zeros_like(run.uncertain))
    result = softsensor.replay(build_plant_model(spec), run.history())
    sd = by_cycle(result.estimates, "sd", [item.tag for item in spec.estimates])[-1]
    np.testing.assert_allclose(sd, np.sqrt(np.diag(E @ corrected @ E.T)), rtol=1e-8)
    spread = by_cycle(result.innovations, "sd", [item.tag for item in spec.sensors])[-1]
    np.testing.assert_allclose(spread, np.sqrt(np.diag(S)), rtol=1e-8)


@pytest.mark.parametrize("numerator", [(4.0,), (-30.0, 4.0), (500.0, -30.0, 4.0, 1.0)])
def test_high_orders_and_repeated_poles_in_polynomial_form(numerator: tuple[float, ...]) -> None:
    """A triple pole, and two pairs of poles close together, given by their coefficients."""
    spec = random_unit(1)
    Ts = spec.sample_time
    triple = np.poly1d([1.0])
    for lag in (8.0, 8.0, 8.0):
        triple *= np.poly1d([lag * Ts, 1.0])
    close = np.poly1d([100.0 * Ts**2, 12.0 * Ts, 1.0]) * np.poly1d([101.0 * Ts**2, 12.0 * Ts, 1.0])
    scaled = tuple(value * Ts ** (len(numerator) - 1 - k) for k, value in enumerate(numerator))
    paths = tuple(
        replace(
            path,
            gain=None,
            time_constants=(),
            lead_times=(),
            integrating=False,
            numerator=scaled,
            denominator=tuple(float(value) for value in (triple if k % 2 else close).coefficients),
        )
        for k, path in enumerate(spec.paths)
    )
    check(replace(spec, paths=paths), 150, 6, 4)
