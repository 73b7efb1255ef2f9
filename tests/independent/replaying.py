"""The program's own replay, driven in stretches of the test's choosing: no frames, one design for many runs."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from independent.dense_filter import LabRow
from independent.recorded_runs import START, Run
from independent.transfer_paths import Array

from connectors.files import history_from_frame
from plant_models.building import build_plant_model
from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.estimation.lab_results import LabArrival, LabOutcome
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.assembly import assemble_history, rules_of
from softsensor.service.replay import Replay, horizon_of, parts_of
from softsensor.service.unit_run import slice_readings
from softsensor.unit_design import design_unit


@dataclass(frozen=True)
class Outcome:
    """What was known at each cycle (N, n_estimates), the digest, the covariance at the end, and the lab results."""

    estimate: Array
    sd: Array
    digest: str
    P: Array
    labs: tuple[LabOutcome, ...]


def design_of(spec: UnitSpec) -> UnitDesign:
    return design_unit(build_plant_model(spec))


def readings_of(run: Run) -> CycleReadings:
    return assemble_history(run.spec, history_from_frame(run.history(), rules_of(run.spec).tags))


def arrival(spec: UnitSpec, lab: LabRow, reported: float | None = None, early: float = 0.0) -> LabArrival:
    """A result sampled at its cycle's time, or ``early`` cycles before it, and reported ``reported`` cycles after the
    start.
    """
    begin = START.value // 1000
    sample = round(spec.sample_time * 1e6)
    item = spec.estimates[lab.estimate].lab
    assert item is not None
    at = lab.known_from if reported is None else reported
    sampled = begin + round((lab.cycle - early) * sample)
    return LabArrival(lab.estimate, item.tag, sampled, begin + round(at * sample), lab.value)


def replay_in_parts(
    design: UnitDesign, readings: CycleReadings, labs: Iterable[LabArrival] = (), cuts: Sequence[int] = ()
) -> Outcome:
    """Replay with the blocks cut before the cycles ``cuts``."""
    labs = list(labs)
    edges = sorted({0, len(readings), *cuts})
    blocks = [slice_readings(readings, a, b) for a, b in pairwise(edges)]
    return outcome_of_replay(Replay(design, parts_of(blocks, labs), horizon_of(labs)))


def outcome_of_replay(replay: Replay) -> Outcome:
    """Run a replay to its end."""
    stretches = list(replay.stretches())
    return Outcome(
        np.concatenate([stretch.results.estimate for stretch in stretches]),
        np.concatenate([stretch.results.sd for stretch in stretches]),
        replay.digest,
        replay.run.state.estimator.P.copy(),
        tuple(outcome for stretch in stretches for outcome in stretch.labs),
    )
