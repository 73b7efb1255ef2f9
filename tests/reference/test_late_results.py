"""A laboratory result counts at its cycle, however late it arrives: the last bit of what in-order processing gives.

Source: none published; the second computation is the dense filter in tests/independent, run in order.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from independent.dense_filter import LabRow, filter_in_order
from independent.random_models import random_unit
from independent.recorded_runs import Run, by_cycle, lab_frame, record
from independent.replaying import Outcome, arrival, design_of, readings_of, replay_in_parts
from independent.transfer_paths import Array

import softsensor
from plant_models.building import build_plant_model
from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign

CYCLES = 160
ORDERS = 50
SPEC = random_unit(6)
"""Two estimates with laboratory results of both, random gaps, disturbances that reach everything."""


@pytest.fixture(scope="module")
def run() -> Run:
    return record(SPEC, CYCLES, 21, gaps=0.2)


@pytest.fixture(scope="module")
def design() -> UnitDesign:
    return design_of(SPEC)


def results_at(run: Run, places: list[tuple[int, int]]) -> list[LabRow]:
    """Results of (cycle, estimate), each reported in its own cycle."""
    rng = np.random.default_rng(len(places))
    rows = []
    for cycle, e in places:
        lab = run.spec.estimates[e].lab
        assert lab is not None
        value = run.truth[cycle, len(run.spec.sensors) + e] + lab.sd * rng.standard_normal()
        rows.append(LabRow(cycle, cycle, e, float(value), lab.sd))
    return rows


def processed(design: UnitDesign, run: Run, labs: list[LabRow], reported: Array | None = None) -> Outcome:
    """Replay with results reported at these cycles, each of a sample of its own; every one of them is used."""
    at = [lab.known_from for lab in labs] if reported is None else reported
    numbers = [sum(other.cycle == lab.cycle and other.value < lab.value for other in labs) for lab in labs]
    arrivals = [
        arrival(run.spec, lab, float(k), 0.25 * number if lab.cycle else 0.0)
        for lab, k, number in zip(labs, at, numbers, strict=True)
    ]
    outcome = replay_in_parts(design, readings_of(run), arrivals)
    assert [lab.status for lab in outcome.labs] == ["used"] * len(labs)
    return outcome


def same_bits(one: Array, other: Array) -> bool:
    return one.tobytes() == other.tobytes()


def test_fifty_random_arrival_orders_end_where_in_order_processing_ends(design: UnitDesign, run: Run) -> None:
    """From the last arrival on; among the results the first cycle, two in one cycle, twice one tag in one cycle."""
    places = [(0, 0), (7, 1), (30, 0), (30, 1), (31, 0), (64, 1), (64, 1), (90, 0), (111, 1), (119, 0)]
    labs = results_at(run, places)
    in_order = processed(design, run, labs)
    dense = filter_in_order(run.spec, run.u, run.y, run.uncertain, labs)
    np.testing.assert_allclose(in_order.sd, dense.sd, rtol=1e-8)
    rng = np.random.default_rng(50)
    changed = 0
    for _ in range(ORDERS):
        earliest = np.array([cycle for cycle, _ in places], dtype=float)
        reported = earliest + rng.random(len(places)) * (CYCLES - 10 - earliest)
        late = processed(design, run, labs, reported)
        last = int(np.ceil(reported.max()))
        assert same_bits(late.estimate[last:], in_order.estimate[last:])
        assert same_bits(late.sd[last:], in_order.sd[last:])
        assert same_bits(late.P, in_order.P)
        changed += not same_bits(late.estimate[:last], in_order.estimate[:last])
    assert changed == ORDERS


def test_before_it_arrives_a_late_result_is_not_known(design: UnitDesign, run: Run) -> None:
    """And in the cycle in which it arrives it is."""
    labs = results_at(run, [(40, 0)])
    without = processed(design, run, [])
    late = processed(design, run, labs, np.array([77.0]))
    in_order = processed(design, run, labs)
    assert same_bits(late.estimate[:77], without.estimate[:77])
    assert same_bits(late.estimate[77:], in_order.estimate[77:])
    assert not same_bits(late.estimate[77], without.estimate[77])


def test_several_results_at_once(design: UnitDesign, run: Run) -> None:
    """Handed over in either order, they count the same."""
    labs = results_at(run, [(12, 1), (50, 0), (50, 1), (80, 0), (80, 0)])
    in_order = processed(design, run, labs)
    at_once = np.full(len(labs), 100.0)
    forward, backward = processed(design, run, labs, at_once), processed(design, run, labs[::-1], at_once)
    assert same_bits(forward.estimate, backward.estimate)
    assert forward.digest == backward.digest
    assert same_bits(forward.estimate[100:], in_order.estimate[100:])


@pytest.mark.parametrize("reported", [0.0, 0.5, 1.0, 20.0, CYCLES - 1.0])
def test_a_result_sampled_at_the_first_cycle(design: UnitDesign, run: Run, reported: float) -> None:
    labs = results_at(run, [(0, 0)])
    late = processed(design, run, labs, np.array([reported]))
    in_order = processed(design, run, labs)
    arrived = int(np.ceil(reported))
    assert late.labs[0].counted_cycle == 0
    assert late.labs[0].arrived_cycle == arrived
    assert same_bits(late.estimate[arrived:], in_order.estimate[arrived:])


def test_a_result_reported_in_its_own_cycle_counts_in_it(design: UnitDesign, run: Run) -> None:
    labs = results_at(run, [(25, 1)])
    outcome = processed(design, run, labs)
    dense = filter_in_order(run.spec, run.u, run.y, run.uncertain, labs)
    without = processed(design, run, [])
    assert same_bits(outcome.estimate[:25], without.estimate[:25])
    assert outcome.sd[25, 1] < without.sd[25, 1]
    np.testing.assert_allclose(outcome.sd, dense.sd, rtol=1e-8)
    found = outcome.labs[0]
    assert found.predicted == pytest.approx(dense.lab_predicted[0], rel=1e-8)
    assert found.sd == pytest.approx(dense.lab_sd[0], rel=1e-8)


def test_a_result_sampled_between_two_cycles_counts_in_the_later(run: Run) -> None:
    """The first cycle at or after its sampling; by the frames that a user hands in."""
    lab = results_at(run, [(25, 0)])[0]
    tag = run.spec.estimates[0].lab
    assert tag is not None
    model, history = build_plant_model(run.spec), run.history()
    exact = softsensor.replay(model, history, lab_frame(run.spec, [(25.0, 60.0, tag.tag, lab.value)]))
    between = softsensor.replay(model, history, lab_frame(run.spec, [(24.1, 59.3, tag.tag, lab.value)]))
    names = [item.tag for item in run.spec.estimates]
    for column in ("value", "sd"):
        one, other = (by_cycle(table, column, names) for table in (exact.estimates, between.estimates))
        assert same_bits(one, other)


def test_a_result_that_cannot_be_right_is_left_out_and_changes_nothing(design: UnitDesign, run: Run) -> None:
    lab = results_at(run, [(40, 0)])[0]
    wrong = replace(lab, value=lab.value + 1e3)
    without = processed(design, run, [])
    outcome = replay_in_parts(design, readings_of(run), [arrival(run.spec, wrong, 70.0)])
    assert len(outcome.labs) == 1
    assert outcome.labs[0].status != "used"
    assert outcome.labs[0].reason
    assert same_bits(outcome.estimate, without.estimate)


def late_cases() -> list[UnitSpec]:
    return [random_unit(seed) for seed in (3, 8, 13)]


@pytest.mark.parametrize("spec", late_cases(), ids=lambda spec: spec.name)
def test_other_models_end_in_the_same_bits_too(spec: UnitSpec) -> None:
    run, design = record(spec, CYCLES, 22, gaps=0.2), design_of(spec)
    rng = np.random.default_rng(3)
    places = [
        (int(k), int(rng.integers(len(spec.estimates)))) for k in sorted(rng.choice(120, 6, replace=False))
    ]
    labs = results_at(run, places)
    in_order = processed(design, run, labs)
    for _ in range(3):
        earliest = np.array([cycle for cycle, _ in places], dtype=float)
        reported = np.ceil(earliest + rng.random(len(places)) * (CYCLES - 10 - earliest))
        late, last = processed(design, run, labs, reported), int(reported.max())
        assert same_bits(late.estimate[last:], in_order.estimate[last:])
        assert same_bits(late.P, in_order.P)
