"""Flags of errors that the estimate follows: kept while nothing shows that the error is gone, closed when something does.

Wood-Berry's one analyser: a lasting error of 0.8 leaves 0.27 sd in its innovation, below the slowest sum's reference value.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pytest
from long_runs.models import COLUMN, FRACTIONATOR, design_named
from long_runs.simulated_plant import Array, Case, Plant, replay_of, seen_by, still_inputs
from scipy.stats import norm

from softsensor.cycle import UnitDesign, start
from softsensor.cycle_results import CycleResults
from softsensor.detection.absorbed_faults import (
    LONGEST_QUIET,
    explained_lately,
    flagged_once_more,
    quiet_needed,
    remembered,
    settle_flags,
    settled_response,
)
from softsensor.detection.absorption import settled_innovation
from softsensor.detection.diagnosis import Likelihoods
from softsensor.detection.flagged_bias import beyond_by_flag, beyond_by_look
from softsensor.detection.flags import Episode, Exclusion, Flag, FlagBook
from softsensor.detection.outcomes import FollowUp, Moment
from softsensor.detection.people import Decision, take
from softsensor.detection.single_faults import QUIET
from softsensor.estimation.kernel import Ints
from softsensor.estimation.steady_state import steady_state

BEGIN, END, AFTER = 600, 3500, 4600
TAG = "AI4101"


def all_in_use(design: UnitDesign) -> Ints:
    return np.ones(design.kernel.n_sensors, dtype=np.int64)


def flag_on(tag: str, size: float, **other: Any) -> Flag:
    made = Flag(f"{tag} bias", tag, "bias", 0, 60_000_000, None, size, 0.05, 0.99, (tag,))
    return replace(made, **other)


def stepped(size: float, until: int = END, cycles: int = AFTER) -> tuple[Array, Array]:
    """Inputs and readings of the column whose analyser reads too much by ``size`` from BEGIN to ``until``."""
    design = design_named(COLUMN)
    bias = np.zeros((cycles, 1))
    bias[BEGIN:until] = size
    case = Case(still_inputs(design.model.spec, cycles), bias=bias)
    return Plant(design.model.spec, 100).readings(case)[1], case.u


@cache
def told(until: int = END) -> tuple[list[Flag], list[str], list[CycleResults]]:
    design = design_named(COLUMN)
    y, u = stepped(0.8, until)
    case = Case(u)
    seen = seen_by(design, case, y, keep=True)
    return seen.flags, [note.kind for note in seen.notes], seen.parts


@pytest.mark.parametrize("name", [COLUMN, FRACTIONATOR])
def test_what_an_error_leaves_is_the_closed_form_s(name: str) -> None:
    design = design_named(name)
    state = steady_state(design.model)
    remaining = np.abs(settled_innovation(state, design.model.stochastic.A))
    for column, tag in enumerate(design.model.sensor_tags):
        left = settled_response(design.detection, tag, all_in_use(design))
        assert left == pytest.approx(remaining[:, column] / np.sqrt(np.diag(state.S)), rel=2e-3, abs=2e-4)


def test_quiet_sums_say_that_a_plain_error_is_gone_and_nothing_of_one_that_is_followed() -> None:
    design = design_named(COLUMN).detection
    use = np.ones(1, dtype=np.int64)
    response = settled_response(design, TAG, use)
    assert response is not None
    slowest = float(design.tests.reference[0, 0])
    assert quiet_needed(design, flag_on(TAG, 0.99 * slowest / response[0]), use) is None
    assert quiet_needed(design, flag_on(TAG, -0.99 * slowest / response[0]), use) is None
    assert quiet_needed(design, flag_on(TAG, 40.0 * slowest / response[0]), use) == QUIET
    size = 1.05 * slowest / response[0]
    climbing = 2.0 * design.tests.interval[0, 0] / (size * response[0] - slowest)
    needed = quiet_needed(design, flag_on(TAG, size), use)
    assert needed == (None if climbing > LONGEST_QUIET else max(QUIET, int(np.ceil(climbing))))
    assert quiet_needed(design, flag_on("FI4101 -> AI4101", 0.3, kind="model"), use) == QUIET


def test_a_followed_error_keeps_its_flag_until_it_goes_back() -> None:
    flags, notes, parts = told()
    start = int(parts[0].times[0])
    (opened, closed) = flags
    assert (opened.tag, opened.cleared, closed.flag) == (TAG, None, opened.flag)
    assert closed.cleared is not None
    back = (closed.cleared - start) / 60e6
    assert END <= back <= END + 30
    assert notes.count("error followed") == 1
    assert notes[-1] == "error gone back"


def test_without_the_step_back_the_flag_stays_and_the_estimate_is_uncertain() -> None:
    flags, notes, parts = told(AFTER)
    assert [flag.cleared for flag in flags] == [None]
    assert "error followed" in notes
    assert "error gone back" not in notes
    assert parts[-1].status[-1].tolist() == [1] * parts[-1].status.shape[1]
    assert f"{TAG} is flagged" in parts[-1].doubts[-1, 0]


def test_the_conformance_probability_is_never_below_what_an_open_flag_says() -> None:
    design = design_named(COLUMN)
    flags, _, parts = told(AFTER)
    least = beyond_by_flag(design.model.spec.sensors[0], flags[0])
    assert least > 0.9
    late = np.concatenate([part.beyond[:, 0] for part in parts if part.times[0] > flags[0].detected])
    assert late.size > 3000
    assert np.all(late >= least)


def test_once_the_error_has_gone_back_it_is_no_longer_probable() -> None:
    flags, _, parts = told()
    gone = flags[-1].cleared
    assert gone is not None
    after = np.concatenate([part.beyond[:, 0] for part in parts if part.times[0] > gone])
    assert np.nanmax(after) < 0.5


def test_a_look_weighs_a_sensor_s_error_with_the_rates_of_faults_and_moves() -> None:
    """Against the sum written out in numpy and scipy."""
    design = design_named(FRACTIONATOR).detection
    random, count = np.random.default_rng(3), len(design.suspects)
    evidence, size = random.uniform(-2.0, 6.0, count), random.normal(0.0, 0.3, count)
    ages, sd = random.integers(1, 50, count), random.uniform(0.02, 0.2, count)
    found = Likelihoods(evidence, ages, size, sd)
    years = 1500 * 60.0 / (365.25 * 86400.0)
    rates = np.array([12.0 if item.source == "disturbance" else 1.0 for item in design.suspects])
    weight = 0.5 * rates * years * np.exp(evidence)
    reach = np.array(
        [age if item.shape == "ramp" else 1 for item, age in zip(design.suspects, ages, strict=True)]
    )
    wanted = np.zeros(5)
    for h, item in enumerate(design.suspects):
        if item.source == "sensor":
            limit = design.model.spec.sensors[item.index].tolerance
            now = norm(size[h] * reach[h], sd[h] * reach[h])
            wanted[item.index] += weight[h] * (now.sf(limit) + now.cdf(-limit))
    assert beyond_by_look(design, found, 1500) == pytest.approx(wanted / (1.0 + weight.sum()), abs=1e-6)


def test_a_run_in_pieces_keeps_what_is_followed_and_gives_the_same_digest() -> None:
    design = design_named(COLUMN)
    y, u = stepped(0.8)
    whole, pieces = (
        replay_of(design, [(u, y)]),
        replay_of(design, [(u[:1200], y[:1200]), (u[1200:], y[1200:])]),
    )
    for replay in (whole, pieces):
        for _ in replay.stretches():
            pass
    assert whole.digest == pieces.digest


def decided(book: FlagBook, flag: Flag, cycle: int = 5000) -> FollowUp:
    design, time = design_named(COLUMN).detection, cycle * 60_000_000
    one = Decision(1, "put back", flag.tag, flag.flag, "", 0.0, "A", "looked at it")
    outcome, taken = take(design, FollowUp(book), cycle, time, one)
    assert taken.refusal == ""
    return outcome


def test_a_finding_closes_a_flag_whose_sensor_was_in_use_all_the_time() -> None:
    flag = flag_on(TAG, 0.8)
    outcome = decided(FlagBook((flag,), absorbed=(flag.flag,)), flag)
    assert (outcome.book.open, outcome.book.absorbed) == ((), ())
    assert [item.cleared for item in outcome.changes] == [5000 * 60_000_000]
    assert [item.flag for item in outcome.book.answered] == [flag.flag]
    assert [note.kind for note in outcome.notes] == ["flag answered"]


def test_a_finding_closes_a_flag_on_an_input_s_instrument_and_on_a_transfer_function() -> None:
    for flag in (flag_on("FI4101", 0.1), flag_on("FI4101 -> AI4101", 0.3, kind="model")):
        assert decided(FlagBook((flag,)), flag).book.open == ()


def test_an_error_kept_out_of_the_estimate_is_not_waited_for() -> None:
    flag = flag_on(TAG, 0.8)
    outcome = decided(FlagBook((flag,), exclusions=(Exclusion(0, 10),)), flag)
    assert outcome.book.answered == ()


def test_closed_flags_are_forgotten_after_a_day() -> None:
    old, lately = flag_on(TAG, 0.8, cleared=0), flag_on(TAG, 0.8, cleared=80_000_000_000)
    outcome = remembered(FollowUp(FlagBook(answered=(old,))), (lately,), 87_000_000_000)
    assert outcome.book.answered == (lately,)


def _once_more(newer: Flag) -> tuple[FollowUp, Flag | None]:
    older = flag_on(TAG, 0.8)
    return flagged_once_more(FollowUp(FlagBook((older,), absorbed=(older.flag,))), newer, 10_000)


def test_the_same_error_seen_again_opens_no_second_flag() -> None:
    for newer in (
        flag_on(TAG, 1.4, flag="newer", onset=30_000_000, detected=9_000_000_000),
        flag_on(TAG, 0.85, flag="newer", onset=7_000_000_000, detected=9_000_000_000),
    ):
        outcome, opened = _once_more(newer)
        assert opened is None
        assert [flag.flag for flag in outcome.book.open] == [f"{TAG} bias"]


def test_what_explains_the_sums_does_so_for_a_while() -> None:
    book = FlagBook(episode=Episode(90, explained_at=100))
    assert explained_lately(book, 100)
    assert explained_lately(book, 100 + LONGEST_QUIET)
    assert not explained_lately(book, 101 + LONGEST_QUIET)
    assert not explained_lately(FlagBook(episode=Episode(90)), 100)
    assert not explained_lately(FlagBook(), 100)


def test_a_further_error_takes_the_older_flag_s_place_and_adds_to_it() -> None:
    newer = flag_on(TAG, 1.4, flag="newer", onset=7_000_000_000, detected=9_000_000_000)
    outcome, opened = _once_more(newer)
    assert opened is not None
    assert (opened.size, outcome.book.open) == (pytest.approx(2.2), ())
    assert [flag.cleared for flag in outcome.changes] == [9_000_000_000]


@pytest.mark.parametrize(("size", "stays"), [(0.8, True), (20.0, False)])
def test_quiet_settles_a_flag_by_the_size_of_its_error(size: float, stays: bool) -> None:
    design = design_named(COLUMN)
    tests = start(design).tests
    tests.down_since[:] = 10_000 - QUIET - 1
    flag = flag_on(TAG, size)
    moment = Moment(10_000, 10_000 * 60_000_000, np.zeros(1, dtype=np.int64), 0)
    outcome = settle_flags(design.detection, FollowUp(FlagBook((flag,))), tests, moment)
    assert [item.flag for item in outcome.book.open] == ([flag.flag] if stays else [])
    assert outcome.book.absorbed == ((flag.flag,) if stays else ())
