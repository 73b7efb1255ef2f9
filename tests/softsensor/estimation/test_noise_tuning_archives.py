"""Readings that an archive has changed are recognised, sensors' own readings are not taken for such."""

from __future__ import annotations

import numpy as np
import pytest

from softsensor.estimation.noise_tuning.archive_checks import (
    RISE,
    low_rise,
    objection_to_archive,
    objection_to_spectrum,
    resolution,
)

CYCLES, SD = 6000, 0.1
RNG = np.random.default_rng(2026)
COURSE = np.cumsum(0.01 * RNG.standard_normal(CYCLES)) + 50.0
READINGS = COURSE + SD * RNG.standard_normal(CYCLES)


def kept_by_dead_band(y: np.ndarray, band: float) -> np.ndarray:
    """Rows that a dead-band keeps: each further than ``band`` from the one kept before."""
    kept = [0]
    for k in range(1, len(y)):
        if abs(y[k] - y[kept[-1]]) > band:
            kept.append(k)
    return np.array(kept)


def kept_by_swinging_door(y: np.ndarray, width: float) -> np.ndarray:
    """Rows from which straight lines stay within ``width`` of every reading."""
    kept, start, low, high, k = [0], 0, -np.inf, np.inf, 1
    while k < len(y):
        low = max(low, (y[k] - width - y[start]) / (k - start))
        high = min(high, (y[k] + width - y[start]) / (k - start))
        if low > high:
            kept.append(k - 1)
            start, low, high = k - 1, -np.inf, np.inf
        else:
            k += 1
    return np.unique([*kept, len(y) - 1])


def drawn(y: np.ndarray, kept: np.ndarray) -> np.ndarray:
    return np.interp(np.arange(len(y)), kept, y[kept])


def held(y: np.ndarray, kept: np.ndarray) -> np.ndarray:
    return y[kept[np.searchsorted(kept, np.arange(len(y)), side="right") - 1]]


@pytest.mark.parametrize("width", [0.5, 1.0, 2.0, 4.0])
def test_lines_between_the_points_of_a_compressed_archive(width: float) -> None:
    for kept in (kept_by_dead_band(READINGS, width * SD), kept_by_swinging_door(READINGS, width * SD)):
        said = objection_to_archive(drawn(READINGS, kept))
        assert said is not None
        assert "straight line" in said


@pytest.mark.parametrize("decimals", [2, 3, 6])
def test_lines_whose_points_were_rounded_are_lines_still(decimals: int) -> None:
    said = objection_to_archive(np.round(drawn(READINGS, kept_by_dead_band(READINGS, 2.0 * SD)), decimals))

    assert said is not None


@pytest.mark.parametrize("width", [0.5, 1.0, 2.0, 4.0])
def test_steps_between_the_points_of_a_dead_band(width: float) -> None:
    said = objection_to_archive(held(READINGS, kept_by_dead_band(READINGS, width * SD)))

    assert said is not None
    assert "repeat" in said


def test_points_one_minute_apart_drawn_every_ten_seconds() -> None:
    minutes = np.arange(0, CYCLES, 6)

    assert "straight line" in str(objection_to_archive(drawn(READINGS, minutes)))
    assert "repeat" in str(objection_to_archive(held(READINGS, minutes)))


def test_lines_look_cleaner_than_the_sensor() -> None:
    """Noise variance 0.0031 against a true 0.0100 at a dead-band of two standard deviations: COMPUTED beforehand
    on an example that was not kept; here on a slowly moving course."""
    lines = drawn(READINGS, kept_by_dead_band(READINGS, 2.0 * SD))

    assert np.var(np.diff(READINGS)) / 2.0 == pytest.approx(0.0100, rel=0.06)
    assert np.var(np.diff(lines)) / 2.0 == pytest.approx(0.0031, rel=0.06)


@pytest.mark.parametrize("step", [1e-6, 0.01, 0.05, 0.1, 0.3])
def test_readings_of_any_resolution_pass(step: float) -> None:
    assert objection_to_archive(np.round(READINGS / step) * step) is None


def test_readings_with_gaps_pass_and_lines_with_gaps_do_not() -> None:
    gaps = np.random.default_rng(3).random(CYCLES) < 0.1
    lines = drawn(READINGS, kept_by_dead_band(READINGS, 2.0 * SD))

    assert objection_to_archive(np.where(gaps, np.nan, READINGS)) is None
    assert objection_to_archive(np.where(gaps, np.nan, lines)) is not None


def test_too_few_readings_say_nothing_and_a_constant_is_no_reading() -> None:
    assert objection_to_archive(np.arange(100.0)) is None
    assert objection_to_archive(np.full(CYCLES, np.nan)) is None
    assert "every reading is the same" in str(objection_to_archive(np.full(CYCLES, 7.0)))


@pytest.mark.parametrize("seed", range(10))
def test_white_innovations_are_not_filtered(seed: int) -> None:
    white = np.random.default_rng(seed).standard_normal(3000)

    assert objection_to_spectrum(white) is None
    assert objection_to_spectrum(np.where(np.arange(3000) % 7 == 0, np.nan, white)) is None


@pytest.mark.parametrize("pole", [0.3, 0.5, 0.8])
def test_filtered_innovations_are_found(pole: float) -> None:
    z = np.random.default_rng(4).standard_normal(3000)
    for k in range(1, len(z)):
        z[k] += pole * z[k - 1]

    assert "filtered or averaged" in str(objection_to_spectrum(z))


def test_innovations_of_a_model_that_is_slow_to_follow_are_not_called_filtered() -> None:
    slow = 0.5 * np.sin(np.arange(3000) / 200.0)

    assert objection_to_spectrum(np.random.default_rng(5).standard_normal(3000) + slow) is None


def with_slow_misfit(seed: int, count: int = 6000) -> np.ndarray:
    """Innovations of a model that is wrong: little noise, and what wanders with the inputs, smooth at the top."""
    random = np.random.default_rng(seed)
    moves = np.where(random.random(count) < 0.01, random.standard_normal(count), 0.0)
    slow = np.cumsum(moves)
    for pole in (0.95, 0.8):
        for k in range(1, count):
            slow[k] = pole * slow[k - 1] + (1.0 - pole) * slow[k]
    z = slow - slow.mean() + 0.01 * random.standard_normal(count)
    return z / z.std()


@pytest.mark.parametrize("seed", range(5))
def test_a_model_that_is_wrong_at_low_frequencies_is_not_called_filtered(seed: int) -> None:
    z = with_slow_misfit(seed)
    over_all, over_next = low_rise(z)

    said = str(objection_to_spectrum(z))

    assert over_all > RISE
    assert over_next > RISE
    assert "does not fit at low frequencies" in said
    assert "filtered" not in said


def test_the_rise_at_low_frequencies_against_a_sum_of_cosines() -> None:
    """Two lines in white noise: the mean powers follow from their amplitudes, by hand."""
    n, k = 6400, np.arange(6400)
    z = np.random.default_rng(8).standard_normal(n)
    assert low_rise(z) == pytest.approx((1.0, 1.0), abs=0.5)

    line = 0.8 * np.cos(2.0 * np.pi * 20.0 * k / n)
    over_all, over_next = low_rise(z + line)

    power = np.abs(np.fft.rfft(z + line - np.mean(z + line))) ** 2
    lowest, following = [power[1:51].mean()], [power[101:201].mean()]
    assert over_all == pytest.approx(lowest[0] / power[1:].mean(), rel=1e-9)
    assert over_next == pytest.approx(lowest[0] / following[0], rel=1e-9)
    assert over_all > 10.0


def test_resolution_is_the_smallest_step() -> None:
    assert resolution(np.array([1.0, 1.5, 1.25, 1.0])) == 0.25
    assert resolution(np.ones(3)) == 0.0
