"""The sheet's sizes, against plain simulation of the whole bank of sums, and what must hold for any of them."""

from __future__ import annotations

import math
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
from independent.sum_banks import SumBank, first_found

from softsensor.detection.detectability import (
    DAY,
    FOUND,
    HORIZONS,
    Bank,
    Findable,
    Sizes,
    findable,
    horizon_cycles,
    watched,
)
from softsensor.detection.run_length import decision_interval
from softsensor.detection.signatures import filter_response, steady_filter
from softsensor.detection.step_signatures import step_signatures
from softsensor.estimation.kernel import build_kernel
from softsensor.unit_design import load_model

LIBRARY = Path(str(files("plant_models.library")))
REFERENCES = (0.2, 0.5, 1.5)
MINUTE = 60.0


def bank(run_length: float = 43_200.0, references: tuple[float, ...] = REFERENCES) -> Bank:
    each = run_length * len(references)
    return Bank(references, tuple(decision_interval(k, each, clip=4.0) for k in references), 4.0)


def fading(cycles: int, settled: float) -> np.ndarray:
    return 10.0 * (settled + (1.0 - settled) * np.exp(-np.arange(cycles) / 30.0))


def line(
    signature: np.ndarray,
    watching: Bank,
    span: float = 1e6,
    sample_time: float = MINUTE,
    promised: float = 30 * DAY,
) -> Findable:
    return findable(watched([(watching, signature)], sample_time, promised), Sizes(0.4, span))


@pytest.mark.parametrize("settled", [0.5, 0.02], ids=["stays", "absorbed"])
def test_the_share_found_in_a_simulation_is_what_the_sheet_promises(settled: float) -> None:
    """90 % within the error of 3000 runs; up to 4 % more, because all sums of the bank look at the same innovations."""
    watching, signature = bank(), fading(10_080, settled)
    found = line(signature, watching)
    rng = np.random.default_rng(29)
    error = 3.5 * math.sqrt(FOUND * (1.0 - FOUND) / 3000)
    for place, cycles in enumerate(horizon_cycles(MINUTE)[:3]):
        step, ramp = found.steps[place], found.ramps[place]
        assert step is not None
        assert ramp is not None
        for means in (step * signature[:cycles], ramp * MINUTE / DAY * np.cumsum(signature[:cycles])):
            sums = SumBank(watching.references, watching.intervals, watching.clip, 3000)
            share = float(np.mean(first_found(sums, means, rng) > 0))
            assert FOUND - error < share < FOUND + error + 0.04


def test_the_time_within_which_the_tolerance_is_found() -> None:
    watching, signature = bank(), fading(10_080, 0.1)
    within = line(signature, watching).tolerance_within
    assert within is not None
    sums = SumBank(watching.references, watching.intervals, watching.clip, 3000)
    when = first_found(sums, 0.4 * signature[:600], np.random.default_rng(31))
    share = float(np.mean((when > 0) & (when <= within / MINUTE)))
    earlier = float(np.mean((when > 0) & (when <= 0.6 * within / MINUTE)))
    assert share > FOUND - 0.02
    assert earlier < FOUND


def test_longer_is_never_worse_and_sizes_follow_the_unit() -> None:
    watching, signature = bank(), fading(10_080, 0.3)
    found = line(signature, watching)
    for sizes in (found.steps, found.ramps):
        whole = [size for size in sizes if size is not None]
        assert len(whole) == len(HORIZONS)
        assert whole == sorted(whole, reverse=True)
    other = line(signature / 1000.0, watching)
    for there, here in zip((*other.steps, *other.ramps), (*found.steps, *found.ramps), strict=True):
        assert there is not None
        assert here is not None
        assert there == pytest.approx(1000.0 * here, rel=0.01)


def test_false_flags_do_not_count_as_found() -> None:
    """With a false flag an hour anything is flagged within a day; a fault must still do something for it."""
    found = line(fading(10_080, 0.3), bank(60.0), promised=3600.0)
    assert all(size is not None and size > 0.02 for size in found.steps)
    assert found.steps[0] == found.steps[3]


def test_a_shift_that_turns_round_is_found_from_the_other_side() -> None:
    signature = np.where(np.arange(10_080) < 3, 1.0, -1.0)
    found = line(signature, bank())
    plain = line(np.ones(10_080), bank())
    assert found.steps[2] == pytest.approx(plain.steps[2], rel=0.02)


def test_what_exceeds_the_range_is_not_found_and_what_has_no_cycle_either() -> None:
    signature = fading(10_080, 0.02)
    found = line(signature, bank(), span=0.1)
    assert found.steps == (None, None, None, None)
    slow = line(fading(28, 0.5), bank(), sample_time=6 * 3600.0)
    assert slow.steps[0] is None
    assert slow.ramps[0] is None
    assert slow.steps[1] is None  # one clipped innovation does not reach any interval
    assert slow.steps[2] is not None
    assert line(np.ones(1), bank(), sample_time=30 * DAY).steps == (None, None, None, None)


def test_the_signature_is_continued_where_it_has_settled() -> None:
    model = load_model(LIBRARY / "heavy_oil_fractionator.toml")
    kernel = build_kernel(model)
    use = np.ones(kernel.n_sensors, dtype=np.int64)
    steady = steady_filter(model, kernel, use)
    signal = np.zeros((20_000, kernel.n_sensors))
    signal[:, 0] = 1.0
    whole = filter_response(kernel, steady.gains, use, signal)[:, 0] / steady.sd[0]
    found = step_signatures(model, kernel, steady, use, ("sensor", 0), 20_000)
    np.testing.assert_allclose(found[:, 0], whole, rtol=2e-3)


def test_what_two_sensors_watch_is_found_by_the_better_one() -> None:
    weak, strong = 0.2 * fading(10_080, 0.3), fading(10_080, 0.3)
    both = findable(watched([(bank(), -weak), (bank(), -strong)], MINUTE, 30 * DAY), Sizes(0.4, 1e6))
    alone = line(strong, bank())
    assert both.steps == pytest.approx(alone.steps, rel=0.01)
    assert both.ramps == pytest.approx(alone.ramps, rel=0.01)
