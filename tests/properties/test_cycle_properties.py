"""What must hold of the cycle whatever the model, the readings and the cuts."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from independent.dense_filter import LabRow
from independent.random_models import random_unit
from independent.recorded_runs import Run, record
from independent.replaying import Outcome, arrival, design_of, readings_of, replay_in_parts
from independent.transfer_paths import Array

from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.estimation.lab_results import LabArrival

CYCLES = 150
SPECS = [random_unit(seed) for seed in (3, 6, 8)]
few = settings(max_examples=25, deadline=None)


@cache
def design_for(model: int) -> UnitDesign:
    return design_of(SPECS[model])


@cache
def run_of(model: int, gaps: float = 0.2) -> Run:
    return record(SPECS[model], CYCLES, 31 + model, gaps=gaps)


@cache
def faulty_run(model: int) -> Run:
    """A run in which the first sensor steps by thirty noise sd at cycle 60: flags come and go."""
    run = run_of(model)
    y = run.y.copy()
    y[60:, 0] += 30.0 * run.spec.sensors[0].noise_sd
    return replace(run, y=y)


def late_arrivals(run: Run) -> list[LabArrival]:
    """Three results, reported late."""
    rows = []
    for cycle, known in ((5, 40), (50, 51), (70, 120)):
        lab = run.spec.estimates[0].lab
        assert lab is not None
        value = float(run.truth[cycle, len(run.spec.sensors)])
        rows.append(arrival(run.spec, LabRow(cycle, known, 0, value, lab.sd)))
    return rows


@cache
def whole(model: int) -> Outcome:
    run = faulty_run(model)
    return replay_in_parts(design_for(model), readings_of(run), late_arrivals(run))


models = st.integers(0, len(SPECS) - 1)


@few
@given(model=models, cuts=st.lists(st.integers(1, CYCLES - 1), max_size=12))
def test_blocks_cut_anywhere_give_the_same_digest(model: int, cuts: list[int]) -> None:
    run = faulty_run(model)
    cut = replay_in_parts(design_for(model), readings_of(run), late_arrivals(run), cuts)
    assert cut.digest == whole(model).digest
    assert cut.P.tobytes() == whole(model).P.tobytes()
    assert cut.estimate.tobytes() == whole(model).estimate.tobytes()


def test_one_cycle_at_a_time_gives_the_same_digest() -> None:
    """As a live service does it."""
    for model in range(len(SPECS)):
        run = faulty_run(model)
        cut = replay_in_parts(design_for(model), readings_of(run), late_arrivals(run), range(1, CYCLES))
        assert cut.digest == whole(model).digest


def definite(P: Array) -> bool:
    """No eigenvalue of the covariance lies below zero by more than rounding.

    A start in steady state is singular: delay lines and lags behind a random walk all equal it, and what moves only
    with a change of it does not vary at all. The states have like sizes, so one scale serves all.
    """
    values = np.linalg.eigvalsh(P)
    return bool(values[0] >= -1e-14 * values[-1])


@few
@given(model=models, seed=st.integers(0, 1000), gaps=st.floats(0.0, 1.0), stop=st.integers(1, CYCLES))
def test_the_covariance_stays_symmetric_and_positive(model: int, seed: int, gaps: float, stop: int) -> None:
    run = record(SPECS[model], stop, seed, gaps=gaps)
    P = replay_in_parts(design_for(model), readings_of(run)).P
    np.testing.assert_array_equal(P, P.T)
    assert definite(P)


@few
@given(model=models, seed=st.integers(0, 1000), share=st.floats(0.01, 1.0))
def test_missing_readings_only_widen(model: int, seed: int, share: float) -> None:
    """Fewer readings, the same or a larger sd of every estimate in every cycle; with none it is strictly larger."""
    run = run_of(model)
    y = run.y.copy()
    y[np.random.default_rng(seed).random(y.shape) < share] = np.nan
    fewer = replay_in_parts(design_for(model), readings_of(replace(run, y=y)))
    more = replay_in_parts(design_for(model), readings_of(run))
    assert (fewer.sd >= more.sd * (1.0 - 1e-12)).all()
    if share == 1.0:
        assert (fewer.sd.sum(axis=0) > more.sd.sum(axis=0)).all()


def permuted(run: Run, order: list[int]) -> tuple[UnitSpec, Run]:
    spec = replace(run.spec, sensors=tuple(run.spec.sensors[i] for i in order))
    n = len(order)
    truth = np.hstack([run.truth[:, :n][:, order], run.truth[:, n:]])
    return spec, replace(
        run, spec=spec, y=run.y[:, order].copy(), uncertain=run.uncertain[:, order].copy(), truth=truth
    )


@settings(max_examples=6, deadline=None)
@given(model=models, data=st.data())
def test_the_order_of_the_sensors_does_not_matter(model: int, data: st.DataObject) -> None:
    """To 1e-9 of the sd: processing them one after another in another order rounds differently."""
    run = run_of(model)
    order = data.draw(st.permutations(range(len(run.spec.sensors))))
    spec, other = permuted(run, order)
    one = replay_in_parts(design_for(model), readings_of(run), late_arrivals(run))
    two = replay_in_parts(design_of(spec), readings_of(other), late_arrivals(other))
    np.testing.assert_allclose(two.sd, one.sd, rtol=1e-9)
    assert (np.abs(two.estimate - one.estimate) / one.sd).max() <= 1e-9
