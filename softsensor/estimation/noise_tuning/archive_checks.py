"""Readings that an archive has changed: interpolated, compressed, held or filtered. Their noise is not the sensor's.

A dead-band or a swinging door keeps few points, and what is drawn between them is cleaner than the sensor: noise
tuned to it makes the estimator trust every reading too much and the fault tests ring for nothing.
"""

from __future__ import annotations

import math

import numpy as np

from softsensor.estimation.kernel import Floats

LEAST_READINGS = 200
"""Consecutive pairs or triples of readings below which no check is made."""
ALLOWANCE = 0.1
"""Share of repeats, or of points in line, beyond what resolution explains, that is let pass."""
RESOLUTION_SLACK = 2.5
"""In steps of the resolution: what rounding of three values can make of a point in line."""
FLAT = 0.85
"""Smallest ratio of an innovation's power in the highest quarter of frequencies to that in the quarter around the
middle; 1 for white noise, and no less where the model is merely slow to follow. Below, beyond chance (SURE standard
errors): averaged or filtered before it was recorded."""
SURE = 3.0
LOWEST = 1.0 / 64.0
"""Share of the frequencies at which a model that is wrong leaves its misfit."""
RISE = 3.0
"""By this the lowest frequencies have more power than all on average, and than those two to four times as high, where the
model is wrong: slow moves of the inputs leave a rise that has no end. A filter's plateau is flat, and the fit makes it as
large as the rest; of one that is not fitted with a pole of 0.8 the two are 9 and 1.4. Of the fractionator with gains
and time constants 20 % off the first was 3 to 82, median 57 (15 sensors, three runs of 12,000 cycles)."""


def resolution(values: Floats) -> float:
    """The smallest step between two different values; 0 where there are none."""
    steps = np.diff(np.unique(values))
    return float(steps.min()) if len(steps) else 0.0


def chance_of_zero(tolerance: float, sd: float) -> float:
    """P(|d| <= tolerance) of a normal d.

    >>> round(chance_of_zero(1.96, 1.0), 4)
    0.95
    """
    return math.erf(tolerance / (sd * math.sqrt(2.0))) if sd > 0.0 else 1.0


def objection_to_archive(y: Floats) -> str | None:
    """Why the noise of these readings (N,), one per cycle and nan where there is none, is not a sensor's; or None."""
    present = y[np.isfinite(y)]
    step = resolution(present)
    if len(present) > LEAST_READINGS and step == 0.0:
        return "every reading is the same: held by the archive, or no reading at all"
    return _repeats(y, step) or _in_line(
        y, max(RESOLUTION_SLACK * step, 1e-9 * float(np.abs(present).max(initial=0.0)))
    )


def _repeats(y: Floats, step: float) -> str | None:
    """Equal neighbours: of readings of this resolution a share is equal by chance, about step / (sd sqrt(2 pi))."""
    difference = np.diff(y)
    difference = difference[np.isfinite(difference)]
    if len(difference) < LEAST_READINGS:
        return None
    found = float(np.mean(difference == 0.0))
    by_chance = chance_of_zero(0.5 * step, _spread(difference))
    if found <= by_chance + ALLOWANCE + 4.0 * math.sqrt(by_chance / len(difference)):
        return None
    return (
        f"{found:.0%} of the readings repeat the one before, where its resolution explains {by_chance:.0%}: "
        "held between reports (dead-band or step interpolation)"
    )


def _in_line(y: Floats, tolerance: float) -> str | None:
    """Points on the straight line through their neighbours, that is second differences of zero."""
    bend = y[2:] - 2.0 * y[1:-1] + y[:-2]
    bend = bend[np.isfinite(bend)]
    if len(bend) < LEAST_READINGS:
        return None
    found = float(np.mean(np.abs(bend) <= tolerance))
    by_chance = chance_of_zero(tolerance, _spread(bend))
    if found <= by_chance + ALLOWANCE + 4.0 * math.sqrt(by_chance / len(bend)):
        return None
    return (
        f"{found:.0%} of the readings lie on the straight line between their neighbours, where its resolution explains "
        f"{by_chance:.0%}: interpolated between few points (compressed archive)"
    )


def _spread(values: Floats) -> float:
    return float(np.sqrt(np.mean(values * values)))


def _power(innovation: Floats) -> Floats | None:
    """Power at frequencies from 0 to half of the sampling; gaps count as the mean. None below LEAST_READINGS."""
    present = np.isfinite(innovation)
    if present.sum() < LEAST_READINGS:
        return None
    filled = np.where(present, innovation - np.mean(innovation[present]), 0.0)
    return np.asarray(np.abs(np.fft.rfft(filled)) ** 2, dtype=np.float64)


def high_share(innovation: Floats) -> tuple[float, float]:
    """Power of standardised innovations (N,) per frequency in the highest quarter over that around the middle, and the
    standard error of its logarithm; gaps count as zero. (nan, nan) below LEAST_READINGS."""
    power = _power(innovation)
    if power is None:
        return math.nan, math.nan
    frequency = np.linspace(0.0, 1.0, len(power))
    high, middle = power[frequency >= 0.75], power[np.abs(frequency - 0.5) <= 0.125]
    return float(high.mean() / middle.mean()), math.sqrt(1.0 / len(high) + 1.0 / len(middle))


def low_rise(innovation: Floats) -> tuple[float, float]:
    """Power of innovations (N,) per frequency at the lowest frequencies (LOWEST) over that of all, and over that from two to
    four times LOWEST; 1 and 1 for white noise. (nan, nan) below LEAST_READINGS."""
    power = _power(innovation)
    if power is None:
        return math.nan, math.nan
    frequency = np.linspace(0.0, 1.0, len(power))
    lowest = power[(frequency > 0.0) & (frequency <= LOWEST)]
    next_ones = power[(frequency > 2.0 * LOWEST) & (frequency <= 4.0 * LOWEST)]
    if not len(lowest) or not len(next_ones):
        return math.nan, math.nan
    return float(lowest.mean() / power[1:].mean()), float(lowest.mean() / next_ones.mean())


def objection_to_spectrum(innovation: Floats) -> str | None:
    """Why innovations (N,) of the fitted model look filtered, or None; or that the model is wrong, which can look so."""
    ratio, log_se = high_share(innovation)
    if math.isnan(ratio) or ratio <= 0.0 or math.log(ratio) >= min(math.log(FLAT), -SURE * log_se):
        return None
    over_all, over_next = low_rise(innovation)
    if over_all > RISE and over_next > RISE:
        return (
            f"the model does not fit at low frequencies: its innovations have {over_all:.0f} times as much power at the "
            "lowest ones as on average, where white noise has as much; gains or time constants are wrong, or a "
            "disturbance is missing, and noise cannot be had before that is mended"
        )
    return (
        f"its innovations have {ratio:.2f} times as much power at the highest frequencies as at the middle ones, where "
        "white noise has as much: filtered or averaged before it was recorded"
    )
