"""Correlation and size of standardised innovations over a stretch: what the fault tests' promise rests on.

A right model leaves independent N(0, 1) innovations. Gaps (nan) are left out pair by pair. The spectrum is that of
Blackman and Tukey: autocovariances under the lag window of Parzen, whose estimate nowhere falls below zero where there
are no gaps. At the window's length M and n readings a spectral estimate has the variance 0.539 M / n of its square
(Priestley, Spectral Analysis and Time Series, 1981, table 6.1; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from softsensor.estimation.kernel import Floats

PORTMANTEAU_LAGS = 20
LEVEL = 0.01
"""Chance that innovations of a right model are called correlated, or too wide."""
MEANS_OF = 20
"""Times the lags that a stretch must be long for its mean to be taken off."""
PARZEN_VARIANCE = 0.539
ONE_SIDED_95 = 1.6448536269514722


@dataclass(frozen=True, slots=True)
class Character:
    """How one sensor's standardised innovations behave.

    :param readings: how many there are.
    :param mean: their mean; ``sd_ratio``: their sd over what the model says, 1 where it is right.
    :param lag_one: correlation of neighbours; ``largest``: the largest in size within PORTMANTEAU_LAGS, at ``largest_lag``.
    :param portmanteau: probability of correlations at least so large, were there none (Ljung & Box 1978).
    :param slow: long-run variance over the model's, 1 where it is right; what a cumulative sum adds up.
    :param slow_sd: standard error of ``slow`` for innovations of a right model.
    """

    readings: int
    mean: float
    sd_ratio: float
    lag_one: float
    largest: float
    largest_lag: int
    portmanteau: float
    slow: float
    slow_sd: float

    @property
    def sound(self) -> bool:
        """Nothing speaks against independent innovations of the right size or smaller."""
        wide = self.sd_ratio**2 > float(chi2.ppf(1.0 - LEVEL, self.readings)) / self.readings
        slow = self.slow > 1.0 + 2.326 * self.slow_sd
        return not wide and not slow and self.portmanteau >= LEVEL


def autocovariances(z: Floats, lags: int) -> Floats:
    """(lags + 1,) Mean products at lags 0, 1, ... of z (n,), nan where there is none.

    About the mean; where the lags are no small part of the stretch about zero, for the mean of so short a stretch takes
    part of the slow correlation with it.
    """
    present = np.isfinite(z)
    mean = float(np.mean(z[present])) if MEANS_OF * lags <= len(z) else 0.0
    centred = np.where(present, z - mean, 0.0)
    size = 1 << int(np.ceil(np.log2(len(z) + lags + 1)))
    spectrum, mask = np.fft.rfft(centred, size), np.fft.rfft(present.astype(np.float64), size)
    products = np.fft.irfft(np.abs(spectrum) ** 2, size)[: lags + 1]
    pairs = np.round(np.fft.irfft(np.abs(mask) ** 2, size)[: lags + 1])
    # dividing all by the readings, less the pairs that the ends take, keeps the spectrum from falling below zero
    share = pairs / np.maximum(pairs[0] * (1.0 - np.arange(lags + 1) / len(z)), 1.0)
    found: Floats = np.where(pairs > 0, products / pairs[0] / np.where(share > 0.0, share, 1.0), 0.0)
    return found


def parzen(lags: int) -> Floats:
    """(lags + 1,) Parzen's lag window, 1 at lag 0 and 0 at the last."""
    x = np.arange(lags + 1) / lags
    return np.where(x <= 0.5, 1.0 - 6.0 * x**2 * (1.0 - x), 2.0 * (1.0 - x) ** 3)


def spectrum(covariances: Floats, points: int) -> Floats:
    """(points // 2 + 1,) Spectral density at equal steps from frequency 0 to one half per cycle; 1 for white noise of sd 1.

    :param covariances: at lags 0, 1, ...; windowed here.
    """
    weighted = covariances * parzen(len(covariances) - 1)
    both = np.zeros(points)
    both[: len(weighted)] = weighted
    both[points - len(weighted) + 1 :] = weighted[1:][::-1]
    return np.maximum(np.fft.rfft(both).real, 0.0)


def character(z: Floats, window: int) -> Character:
    """Judge standardised innovations (n,), nan where there is none.

    :param window: lags of the long-run variance: several times as long as a cumulative sum remembers.
    """
    present = z[np.isfinite(z)]
    n = len(present)
    covariances = autocovariances(z, max(window, PORTMANTEAU_LAGS))
    rho = covariances / covariances[0]
    lags = np.arange(1, PORTMANTEAU_LAGS + 1)
    statistic = n * (n + 2.0) * float(np.sum(rho[1 : PORTMANTEAU_LAGS + 1] ** 2 / (n - lags)))
    at = int(np.argmax(np.abs(rho[1 : PORTMANTEAU_LAGS + 1]))) + 1
    weights = parzen(window)
    slow = covariances[0] + 2.0 * float(np.sum(weights[1:] * covariances[1 : window + 1]))
    return Character(
        n,
        float(np.mean(present)),
        float(np.sqrt(np.mean(present**2))),
        float(rho[1]),
        float(rho[at]),
        at,
        float(chi2.sf(statistic, PORTMANTEAU_LAGS)),
        slow,
        float(np.sqrt(2.0 * PARZEN_VARIANCE * window / n)),
    )
