"""A second fault beside a flagged one that is not left out: found, named and sized; and none where there is none."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from long_runs.models import FRACTIONATOR, design_named, path_of
from long_runs.simulated_plant import Array, Case, Plant, Seen, seen_by, still_inputs

from plant_models.building import build_plant_model
from plant_models.model_file import read_model_file
from softsensor.cycle import UnitDesign
from softsensor.detection.second_fault import score_beside, take_out
from softsensor.unit_design import design_unit

FIRST, SECOND, CYCLES = 700, 1500, 2600


@cache
def leaving_out() -> UnitDesign:
    spec = read_model_file(path_of(FRACTIONATOR))
    return design_unit(build_plant_model(replace(spec, leave_out_isolated=True)))


def faulty(design: UnitDesign, second: float, drift: float = 0.0, seed: int = 5) -> Seen:
    """A bias of 0.1 on the first sensor, then one on the last; or a drift of the first, per day."""
    spec = design.model.spec
    bias = np.zeros((CYCLES, len(spec.sensors)))
    bias[FIRST:, 0] = 0.1 if drift == 0.0 else drift * np.arange(CYCLES - FIRST) / 1440.0
    bias[SECOND:, -1] = second
    case = Case(still_inputs(spec, CYCLES), bias=bias)
    return seen_by(design, case, Plant(spec, seed).readings(case)[1], keep=True)


def beyond(seen: Seen, sensor: int) -> Array:
    return np.concatenate([part.beyond[:, sensor] for part in seen.parts])


def test_a_second_fault_is_found_beside_the_first_that_still_counts() -> None:
    design = design_named(FRACTIONATOR)
    first, last = design.model.sensor_tags[0], design.model.sensor_tags[-1]
    seen = faulty(design, -0.1)
    opened = {flag.tag: flag for flag in seen.flags if flag.cleared is None}
    assert set(opened) == {first, last}
    second = opened[last]
    assert second.group == (last,)
    assert abs(second.size + 0.1) < 4.0 * second.size_sd
    start = int(seen.parts[0].times[0])
    assert SECOND <= (second.detected - start) / 60e6 <= SECOND + 120
    assert np.all(beyond(seen, 0)[SECOND + 200 :] > 0.5)
    assert np.all(beyond(seen, len(opened) + 2)[SECOND + 200 :] > 0.5)


@pytest.mark.parametrize("seed", [5, 6, 7])
def test_one_fault_stays_one_flag(seed: int) -> None:
    seen = faulty(design_named(FRACTIONATOR), 0.0, seed=seed)
    assert len({flag.tag for flag in seen.flags}) == 1


def test_a_drift_that_was_flagged_early_is_seen_to_pass_its_tolerance() -> None:
    design = design_named(FRACTIONATOR)
    tolerance = design.model.spec.sensors[0].tolerance
    told = beyond(faulty(design, 0.0, drift=-0.12), 0)
    true = 0.12 * (np.arange(CYCLES) - FIRST) / 1440.0
    assert not np.any(told[: FIRST + 300] > 0.5)
    assert np.all(told[true > 1.5 * tolerance] > 0.9)


def test_leaving_a_second_sensor_out_does_not_clear_the_first_one_s_flag() -> None:
    """The first sensor's sums are up, against the prediction without it, when all sums start anew."""
    seen = faulty(leaving_out(), -0.1)
    assert len({flag.tag for flag in seen.flags}) == 2
    assert [flag for flag in seen.flags if flag.cleared is not None] == []


def test_the_score_beside_is_that_of_least_squares_with_the_known_sizes_free() -> None:
    """Against numpy's least squares: the drop of the residual's sum of squares by one regressor more."""
    random = np.random.default_rng(4)
    count, m, age = 60, 3, 41
    known, eps = random.standard_normal((3, count, m)), random.standard_normal((count, m))
    known[2] = 2.0 * known[0] - known[1]
    whole = (random.random(count) > 0.1).astype(np.int64)
    signature = random.standard_normal((count, m))
    mask = whole.astype(bool)
    regressors = known[:, mask].reshape(3, -1).T
    shown = np.zeros((count, m))
    shown[count - age :] = signature[:age]
    y, v = eps[mask].ravel(), shown[mask].ravel()

    def left(design: Array) -> float:
        fitted = design @ np.linalg.lstsq(design, y, rcond=None)[0]
        return float(np.sum((y - fitted) ** 2))

    before, after = left(regressors), left(np.column_stack((regressors, v)))
    taken = take_out(known, eps, whole)
    numerator, denominator = score_beside(signature, eps, whole, known, age)
    assert taken == pytest.approx(0.5 * (float(y @ y) - before), rel=1e-9)
    assert numerator**2 / denominator == pytest.approx(before - after, rel=1e-9)
