"""What a summary adds up, against the same figures from whole columns; however the cycles come in pieces."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from plant_models.library import published_model_path
from softsensor.cycle_results import CycleResults, waiting_results
from softsensor.detection.shift_tests import DOWN
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.running_counts import Counts, count, no_counts
from softsensor.unit_design import design_unit, load_model

N = 400


def results(seed: int) -> CycleResults:
    """Cycles of the quadruple tank with random innovations, gaps, and sums that go up and down."""
    kernel = design_unit(load_model(str(published_model_path("quadruple_tank")))).kernel
    rng, shape = np.random.default_rng(seed), (N, kernel.n_sensors)
    u, quality = np.zeros((N, kernel.n_inputs)), np.zeros((N, kernel.n_inputs), dtype=np.int8)
    readings = CycleReadings(
        np.arange(N, dtype=np.int64), u, quality, np.zeros(shape), np.zeros(shape, np.int8)
    )
    used = (rng.random(shape) < 0.8).astype(np.int8)
    innovation = np.where(rng.random(shape) < 0.9, rng.standard_normal(shape), np.nan)
    return replace(
        waiting_results(kernel, readings),
        innovation=innovation,
        innovation_sd=rng.uniform(0.5, 2.0, shape),
        used=np.where(np.isnan(innovation), 0, used).astype(np.int8),
        high=rng.uniform(0.0, 1.3, shape),
        low=rng.uniform(0.0, 1.3, shape),
        left_out=(rng.random(shape) < 0.2).astype(np.int8),
    )


def piece(whole: CycleResults, start: int, stop: int) -> CycleResults:
    names = ("times", "innovation", "innovation_sd", "used", "high", "low", "left_out")
    return replace(whole, **{name: getattr(whole, name)[start:stop].copy() for name in names})


def counted(whole: CycleResults, cuts: tuple[int, ...]) -> Counts:
    counts = no_counts(whole.innovation.shape[1])
    for start, stop in zip((0, *cuts), (*cuts, N), strict=True):
        count(counts, piece(whole, start, stop))
    return counts


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_counts_are_those_of_whole_columns(seed: int) -> None:
    whole = results(seed)
    counts = counted(whole, ())
    z = np.where(whole.used != 0, whole.innovation / whole.innovation_sd, np.nan)
    products = z[1:] * z[:-1]
    np.testing.assert_array_equal(counts.readings, np.isfinite(z).sum(axis=0))
    np.testing.assert_allclose(counts.squares, np.nansum(z * z, axis=0), rtol=1e-12)
    np.testing.assert_array_equal(counts.pairs, np.isfinite(products).sum(axis=0))
    np.testing.assert_allclose(counts.products, np.nansum(products, axis=0), rtol=1e-9)
    np.testing.assert_array_equal(counts.runs, [runs(column) for column in tops(whole).T])


def tops(whole: CycleResults) -> np.ndarray:
    return np.where(whole.left_out != 0, 0.0, np.maximum(whole.high, whole.low))


def runs(top: np.ndarray) -> int:
    """Above 1, not counting again until it was below DOWN."""
    levels = [value for value in top if value > 1.0 or value < DOWN]
    return sum(now > 1.0 and before < DOWN for before, now in zip([0.0, *levels[:-1]], levels, strict=True))


def test_counts_do_not_depend_on_pieces() -> None:
    whole = results(4)
    once, often = counted(whole, ()), counted(whole, (1, 2, 77, 250))
    assert [part.tobytes() for part in once] == [part.tobytes() for part in often]
