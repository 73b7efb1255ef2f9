"""A run that begins in a moving plant flags nothing until it knows the plant; one that begins at rest loses nothing."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from independent.recorded_runs import Run, record
from independent.replaying import readings_of

from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.plant_model import PlantModel
from plant_models.specification import PathSpec
from softsensor.cycle import UnitDesign
from softsensor.detection.beginning import Forgetting, forgetting, free_response
from softsensor.detection.flags import Flag, Note
from softsensor.detection.outcomes import SHIFT_KINDS
from softsensor.detection.signatures import steady_filter
from softsensor.service.checkpoints import FORMAT, Context, pack_state, unpack_state
from softsensor.service.replay import Replay
from softsensor.service.unit_run import slice_readings
from softsensor.unit_design import design_unit, load_model

BEFORE, AFTER = 200, 260
"""Cycles that the plant runs before the program begins, and that are looked at."""


@pytest.fixture(scope="module")
def fractionator() -> UnitDesign:
    """The fractionator of the library, whose first sensor's bias is not absorbed."""
    return design_unit(load_model(published_model_path("heavy_oil_fractionator")))


@dataclass(frozen=True)
class Seen:
    """What a run brought: flags of shifts; times in cycles."""

    flags: tuple[Flag, ...]
    notes: tuple[Note, ...]
    digest: str
    settling: np.ndarray
    detected: tuple[int, ...]


@pytest.fixture(scope="module")
def design() -> UnitDesign:
    """The distillation column of the library."""
    return design_unit(load_model(published_model_path("wood_berry")))


def without(design: UnitDesign) -> UnitDesign:
    """The same unit, trusting every beginning."""
    return replace(design, detection=replace(design.detection, forgetting=Forgetting(0, 0)))


def seen(design: UnitDesign, run: Run) -> Seen:
    readings = readings_of(run)
    replay = Replay(design, [(readings, [])])
    settling = [stretch.results.settling for stretch in replay.stretches()]
    flags = tuple(flag for flag in replay.totals.flags.values() if flag.kind in SHIFT_KINDS)
    step = design.detection.sample_us
    detected = tuple((flag.detected - int(readings.times[0])) // step for flag in flags)
    return Seen(flags, tuple(replay.totals.notes), replay.digest, np.concatenate(settling), detected)


def moving(design: UnitDesign, seed: int) -> Run:
    """The program begins after BEFORE cycles of moves of both inputs."""
    run = record(design.model.spec, BEFORE + AFTER, seed, move=0.06)
    return Run(run.spec, run.u[BEFORE:], run.y[BEFORE:], run.uncertain[BEFORE:], run.truth[BEFORE:])


def still(design: UnitDesign, seed: int, bias: float = 0.0, at: int = 0) -> Run:
    """Inputs never move; a sensor may jump."""
    run = record(design.model.spec, design.detection.forgetting.until + AFTER, seed, move=0.0)
    y = run.y.copy()
    y[at:, 0] += bias
    return Run(run.spec, run.u, y, run.uncertain, run.truth)


SEEDS = range(20)


def test_a_start_in_a_moving_plant_flags_nothing_early_and_without_the_rule_it_does(
    design: UnitDesign,
) -> None:
    early = [sum(at <= 80 for at in seen(design, moving(design, seed)).detected) for seed in SEEDS]
    trusting = [
        sum(at <= 80 for at in seen(without(design), moving(design, seed)).detected) for seed in SEEDS
    ]
    assert sum(count > 0 for count in trusting) >= 4
    assert sum(early) == 0


def test_the_rest_is_on_record_with_its_end_and_the_estimates_are_uncertain_meanwhile(
    design: UnitDesign,
) -> None:
    runs = [seen(design, moving(design, seed)) for seed in SEEDS]
    resting = [run for run in runs if np.any(run.settling == 2)]
    assert len(resting) >= 5
    for run in resting:
        said, ended = run.notes[:2]
        assert said.text.startswith("the plant was moving when the run began (")
        assert "the tests of innovations begin at " in said.text
        assert ended.text.endswith("is forgotten: the tests of innovations begin")
        at = np.flatnonzero(run.settling == 2)
        assert at[-1] == design.detection.forgetting.until - 1
        assert np.array_equal(at, np.arange(at[0], at[-1] + 1))


def test_a_start_at_rest_is_the_same_to_the_last_bit(design: UnitDesign) -> None:
    for seed in range(5):
        run = still(design, seed)
        assert seen(design, run).digest == seen(without(design), run).digest


def test_a_fault_after_the_first_stretch_is_found_without_delay_and_one_before_it_once_the_tests_begin(
    fractionator: UnitDesign,
) -> None:
    past, bias = fractionator.detection.forgetting, 2.0 * fractionator.model.spec.sensors[0].tolerance
    for seed in range(4):
        run = still(fractionator, seed, bias, past.onset_by + 2)
        assert seen(fractionator, run).detected[:1] == seen(without(fractionator), run).detected[:1] != ()
        early = seen(fractionator, still(fractionator, seed, bias, 20))
        assert seen(without(fractionator), still(fractionator, seed, bias, 20)).detected[0] < past.onset_by
        assert past.until <= early.detected[0] < past.until + 60


def test_a_checkpoint_keeps_the_beginning(design: UnitDesign) -> None:
    run = next(
        moving(design, seed) for seed in SEEDS if np.any(seen(design, moving(design, seed)).settling == 2)
    )
    readings = readings_of(run)
    replay = Replay(design, [(slice_readings(readings, k, k + 1), []) for k in range(len(readings))])
    stretches = replay.stretches()
    while not replay.run.state.book.unsteady(replay.run.state.next_cycle):
        next(stretches)
    state, _ = unpack_state(pack_state(replay.run.state, Context("", 0, 0)), FORMAT)
    assert state.book == replay.run.state.book
    assert state.book.settling is not None


def test_the_free_response_of_one_lag_and_dead_time_is_the_exponential() -> None:
    base = load_model(published_model_path("wood_berry")).spec
    path = PathSpec(base.inputs[0].tag, base.sensors[0].tag, -2.5, (700.0,), (), 150.0)
    model = build_plant_model(replace(base, paths=(path, *base.paths[1:])))
    found = free_response(model.paths[0], 60)
    after = np.arange(60) * base.sample_time - 150.0
    assert found == pytest.approx(-2.5 * np.exp(-np.maximum(after, 0.0) / 700.0), rel=1e-12)


def test_what_is_forgotten_when(design: UnitDesign) -> None:
    model: PlantModel = design.model
    reference = design.detection.tests.reference[:, 0]
    steady = steady_filter(model, design.kernel, np.ones(1, dtype=np.int64))
    found = forgetting(model, design.kernel, steady, reference)
    assert 0 < found.onset_by < found.until
    stricter = forgetting(model, design.kernel, steady, 0.1 * reference)
    assert stricter.until > found.until
    inputs = tuple(
        replace(item, validated_range=(item.operating_point, item.operating_point + 1e-9))
        for item in model.spec.inputs
    )
    unmoved = build_plant_model(replace(model.spec, inputs=inputs))
    assert forgetting(unmoved, design.kernel, steady, reference) == Forgetting(0, 0)
