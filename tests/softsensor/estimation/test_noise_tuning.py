"""Known noise is found again within its stated intervals; what the readings cannot separate is refused by name."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.noisy_plants import fit_to, mistaken, random_noisy_unit, sensor, unit
from independent.recorded_runs import record
from scipy.stats import binom

from plant_models.building import build_plant_model
from plant_models.errors import Problem
from plant_models.specification import DisturbanceSpec, PathSpec, UnitSpec
from softsensor.estimation.noise_tuning.maximum_likelihood import maximise
from softsensor.estimation.noise_tuning.parameters import noise_parameters
from softsensor.estimation.noise_tuning.separability import alike, certainty, interval, too_fast

PLANTS, CYCLES = 40, 1000


def test_known_noise_lies_within_its_95_percent_interval_as_often_as_it_should() -> None:
    inside: list[bool] = []
    refused = 0
    for seed in range(PLANTS):
        spec = random_noisy_unit(seed)
        fit = fit_to(mistaken(spec, seed), record(spec, CYCLES, seed, gaps=0.05))
        best = maximise(fit)
        known = certainty(best)
        if known.objections:
            refused += 1
            continue
        for item, value, sd in zip(noise_parameters(spec), best.values, known.log_sd, strict=True):
            low, high = interval(float(value), float(sd))
            inside.append(low <= item.value <= high)

    assert refused <= PLANTS // 4
    low, high = binom.interval(0.999, len(inside), 0.95)
    assert low <= sum(inside) <= high


def walk(name: str, walk_sd: float = 0.5) -> DisturbanceSpec:
    return DisturbanceSpec(name, walk_sd=walk_sd)


def wanders(name: str, time_constant: float = 200.0) -> DisturbanceSpec:
    return DisturbanceSpec(name, sd=0.5, time_constant=time_constant)


LAG = (50.0,)
TWO_ALIKE = unit(
    (sensor(0),),
    (wanders("a"), wanders("b")),
    (PathSpec("a", "TI0", 1.0, LAG), PathSpec("b", "TI0", -2.0, LAG)),
)
WALKS_ALIKE = unit(
    (sensor(0), sensor(1)),
    (walk("a"), walk("b")),
    (
        PathSpec("a", "TI0", 1.0, LAG),
        PathSpec("b", "TI0", 2.0, LAG),
        PathSpec("a", "TI1", 0.5, LAG),
        PathSpec("b", "TI1", 1.0, LAG),
    ),
)
WALK_AND_OFFSET = unit((sensor(0, bias_walk_sd=0.3),), (walk("a"),), (PathSpec("a", "TI0", 1.0),))
UNSEEN = unit(
    (sensor(0),), (wanders("a"), wanders("b")), (PathSpec("a", "TI0", 1.0, LAG), PathSpec("b", "AY1", 1.0))
)
NEVER_TURNS = unit((sensor(0),), (wanders("a", 2e6),), (PathSpec("a", "TI0", 1.0, LAG),))
LIKE_NOISE = unit((sensor(0),), (wanders("a", 0.5),), (PathSpec("a", "TI0", 1.0),))
CASES = {
    "two alike": (TWO_ALIKE, {"a", "b"}),
    "two walks alike": (WALKS_ALIKE, {"a", "b"}),
    "a walk and an offset": (WALK_AND_OFFSET, {"a.walk_sd", "TI0.bias_walk_sd"}),
    "unseen": (UNSEEN, {"b.sd", "b.time_constant"}),
    "slower than the record": (NEVER_TURNS, {"a.sd", "a.time_constant"}),
    "faster than the samples": (LIKE_NOISE, {"a.time_constant"}),
}


def objections_to(spec: UnitSpec, seed: int) -> tuple[str, ...]:
    best = maximise(fit_to(spec, record(spec, 1200, seed)))
    structure = alike(spec, build_plant_model(spec).stochastic, best.parameters)
    return structure + certainty(best).objections + too_fast(best, spec.sample_time)


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("seed", range(2))
def test_what_cannot_be_separated_is_refused_and_named(name: str, seed: int) -> None:
    spec, names = CASES[name]
    said = objections_to(spec, seed)

    assert said
    for wanted in names:
        assert any(wanted in line for line in said), said


def test_what_can_be_separated_is_not_refused() -> None:
    spec = unit(
        (sensor(0), sensor(1)),
        (wanders("a"), walk("b")),
        (PathSpec("a", "TI0", 1.0, LAG), PathSpec("b", "TI1", 1.0, LAG), PathSpec("b", "TI0", 0.5)),
    )

    assert objections_to(spec, 1) == ()


def test_one_of_two_alike_can_be_fitted_with_the_other_kept() -> None:
    part = build_plant_model(TWO_ALIKE).stochastic
    left = noise_parameters(TWO_ALIKE, ("a.sd", "a.time_constant"))

    assert [item.name for item in left] == ["TI0.noise_sd", "b.sd", "b.time_constant"]
    assert alike(TWO_ALIKE, part, left) == ()


def test_names_that_the_model_does_not_have_are_refused_with_those_it_has() -> None:
    with pytest.raises(Problem, match=r"--keep: TI9\.noise_sd is no noise.*TI0\.noise_sd, a\.sd"):
        noise_parameters(TWO_ALIKE, ("TI9.noise_sd",))
    every = [item.name for item in noise_parameters(TWO_ALIKE)]
    with pytest.raises(Problem, match="at least one"):
        noise_parameters(TWO_ALIKE, every)


def test_a_start_far_away_leads_to_the_same_maximum() -> None:
    spec = random_noisy_unit(3)
    run = record(spec, 1500, 3)
    near, far = maximise(fit_to(spec, run)), maximise(fit_to(mistaken(spec, 3, reach=3.0), run))

    assert near.converged
    assert far.converged
    assert far.values == pytest.approx(near.values, rel=1e-3)
    assert far.log_likelihood == pytest.approx(near.log_likelihood, abs=1e-4)


def test_a_lead_in_is_run_but_not_counted() -> None:
    spec = random_noisy_unit(3)
    run = record(spec, 300, 3)
    theta = np.log([item.value for item in noise_parameters(spec)])
    whole, tail = fit_to(spec, run).at(theta), fit_to(spec, run, 100).at(theta)
    first = fit_to(spec, replace(run, u=run.u[:100], y=run.y[:100], uncertain=run.uncertain[:100])).at(theta)

    assert whole.readings == tail.readings + first.readings
    assert whole.value == pytest.approx(tail.value + first.value, rel=1e-12)
