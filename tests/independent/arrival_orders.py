"""A small unit whose laboratory results come in any order, late and corrected: what to hand over, and what must come out."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from independent.recorded_runs import START, Run, record
from independent.replaying import Outcome, design_of, readings_of, replay_in_parts
from independent.small_unit import MODEL

from plant_models.model_file import parse_model_text
from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.estimation.lab_results import LabArrival

CYCLES = 70
"""More than a chunk of remembered states."""
STEP = 10_000_000
BEGIN = START.value // 1000


@dataclass(frozen=True)
class Report:
    """A value of a sample, both times in cycles from the start, fractions allowed."""

    sampled: float
    reported: float
    value: float


@cache
def small_spec() -> UnitSpec:
    return parse_model_text(MODEL, "r1.toml")


@cache
def small_design() -> UnitDesign:
    return design_of(small_spec())


@cache
def small_run() -> Run:
    return record(small_spec(), CYCLES, 9, gaps=0.1)


def true_value(sampled: float) -> float:
    """The estimate's true value at the cycle that a sample counts at."""
    return float(small_run().truth[int(np.ceil(sampled)), 1])


def outcome_of(reports: list[Report], cuts: tuple[int, ...] = ()) -> Outcome:
    """The program's own replay with these reports."""
    arrivals = [
        LabArrival(0, "AL1", BEGIN + round(r.sampled * STEP), BEGIN + round(r.reported * STEP), r.value)
        for r in reports
    ]
    return replay_in_parts(small_design(), readings_of(small_run()), arrivals, cuts)


def in_order(reports: list[Report]) -> list[Report]:
    """The last value of each sample alone, reported as soon as it was taken."""
    last = {r.sampled: r for r in sorted(reports, key=lambda r: r.reported)}
    return [Report(r.sampled, r.sampled, r.value) for r in last.values()]


def assert_same_from_the_last_report_on(
    reports: list[Report], cuts: tuple[int, ...] = ()
) -> tuple[Outcome, Outcome]:
    """Late, shuffled and corrected: bit for bit what in-order processing of the last values gives; both outcomes."""
    late, ordered = outcome_of(reports, cuts), outcome_of(in_order(reports))
    first = int(np.ceil(max((r.reported for r in reports), default=0.0)))
    assert late.estimate[first:].tobytes() == ordered.estimate[first:].tobytes()
    assert late.sd[first:].tobytes() == ordered.sd[first:].tobytes()
    assert late.P.tobytes() == ordered.P.tobytes()
    return late, ordered
