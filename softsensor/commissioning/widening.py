"""How much wider a sensor's decision intervals must be for innovations as they are, so that the promise holds.

Innovations with the measured spectrum are drawn (Gaussian, from a seed) and the sensor's sums are run over them for many
widths at once. The narrowest width is taken at which the rate of going up, with the 95 % bound of a Poisson count, is not
above the promised one. What chance has left open in the spectrum is paid for: its upper 95 % bound is drawn from.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from softsensor.commissioning.bank_run import Bank, BankRun
from softsensor.commissioning.correlation import (
    ONE_SIDED_95,
    PARZEN_VARIANCE,
    Character,
    autocovariances,
    character,
    spectrum,
)
from softsensor.estimation.kernel import Floats

WIDEST = 3.0
"""Beyond this the tests stay disarmed: what so wide a test still finds, people have long seen."""
STEP = 0.02
PIECE = 1 << 18
"""Cycles drawn at a time; pieces are independent."""
EXPECTED = 40.0
"""False flags that the promise allows in the time that is simulated."""
MEMORY = 8.0
"""Lags of the spectrum, in times that a sum needs from zero to its interval under a shift of twice its reference value."""
LONGEST_MEMORY = 65_536
UP_SHARE = 0.02
"""Of the time, for which a bank may be up without a fault."""
ENOUGH = 0.7
"""Share of the promise that is let pass as chance where nothing speaks against the innovations."""


@dataclass(frozen=True, slots=True)
class Widening:
    """What was found for one sensor; run lengths in cycles, of the spectrum that was drawn from.

    :param factor: of the decision intervals; None where none up to WIDEST keeps the promise.
    :param before, after: mean cycles between false flags with the intervals as they were and with the factor.
    """

    factor: float | None
    before: float
    after: float | None


def memory(bank: Bank) -> int:
    """Lags over which correlation matters to these sums."""
    longest = float(np.max(bank.interval / bank.reference))
    return int(min(max(math.ceil(MEMORY * longest), 64), LONGEST_MEMORY))


def upper_rate(count: int) -> float:
    """Upper 95 % bound of a Poisson mean from a count (Garwood 1936).

    >>> round(upper_rate(0), 4), round(upper_rate(10), 3)
    (2.9957, 16.962)
    """
    return float(chi2.ppf(0.95, 2 * (count + 1)) / 2.0)


def widening(z: Floats, bank: Bank, promise: float, seed: int = 1) -> tuple[Character, Widening]:
    """Judge one sensor's standardised innovations z (n,), nan where there is none, and widen its intervals where needed.

    Where nothing speaks against the innovations and the promise holds nearly (ENOUGH) at the spectrum as measured, the
    intervals stay. Where something does, the upper 95 % bound of the spectrum is drawn from.

    :param promise: cycles between false flags that the bank is to keep.
    """
    lags = memory(bank)
    found = character(z, lags)
    density = spectrum(autocovariances(z, lags), PIECE)
    bound = 1.0 + ONE_SIDED_95 * math.sqrt(PARZEN_VARIANCE * lags / found.readings)
    offset = 0.0 if found.sound else _offset(found)
    run = simulated(density, offset, bank, EXPECTED * promise, seed)
    before = between_ups(run, 0)
    if found.sound and before >= ENOUGH * promise and run.up_cycles[0] <= UP_SHARE * run.cycles:
        return found, Widening(1.0, before, before)
    if not found.sound:
        run = simulated(density * bound, offset, bank, EXPECTED * promise, seed)
    kept = kept_widths(run, promise)
    if not kept:
        return found, Widening(None, before, None)
    j = kept[0]
    return found, Widening(float(run.factors[j]), before, between_ups(run, j))


def kept_widths(run: BankRun, promise: float) -> list[int]:
    """Places of the widths at which the bank goes up no more often than promised, and is not up for long either: a bank
    that never comes down goes up once."""
    return [
        j
        for j, (count, cycles) in enumerate(zip(run.counts, run.up_cycles, strict=True))
        if upper_rate(int(count)) * promise <= run.cycles and cycles <= UP_SHARE * run.cycles
    ]


def between_ups(run: BankRun, j: int) -> float:
    """Mean cycles from one going up to the next at a width; the time that the bank is up does not count."""
    return float(run.cycles - run.up_cycles[j]) / max(float(run.counts[j]), 1.0)


def _offset(found: Character) -> float:
    """The mean of the innovations where chance does not explain it, else zero."""
    sd = math.sqrt(max(found.slow, 0.0) / found.readings)
    return found.mean if abs(found.mean) > 2.576 * sd else 0.0


def simulated(density: Floats, offset: float, bank: Bank, cycles: float, seed: int) -> BankRun:
    """The bank over Gaussian innovations of this spectrum and mean, at all widths from 1 to WIDEST."""
    factors = np.round(np.arange(1.0, WIDEST + 0.5 * STEP, STEP), 10)
    run = BankRun(bank, factors)
    rng = np.random.default_rng([seed, 77])
    amplitude = np.sqrt(density * PIECE / 2.0)
    while run.cycles < cycles:
        parts = rng.standard_normal((2, len(density)))
        wave = amplitude * (parts[0] + 1j * parts[1])
        wave[0], wave[-1] = (
            math.sqrt(2.0) * amplitude[0] * parts[0, 0],
            math.sqrt(2.0) * amplitude[-1] * parts[0, -1],
        )
        run.add(np.fft.irfft(wave, PIECE) + offset)
    return run
