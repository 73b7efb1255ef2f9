"""What came of a tuning: numbers, what the rest of the history says of them, intervals, and refusals."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from softsensor.estimation.kernel import Floats
from softsensor.estimation.noise_tuning.parameters import NoiseParameter
from softsensor.service.tuned_file import Change


@dataclass(frozen=True, slots=True)
class FittedNumber:
    """One number of the file: before, fitted, its 95 % interval and what it will be in the new file; times in seconds."""

    parameter: NoiseParameter
    fitted: float
    low: float
    high: float
    written: float


@dataclass(frozen=True, slots=True)
class Whiteness:
    """One sensor's innovations on cycles that were not fitted: nis (1 is right), lag-one correlation (0 is right), and the
    largest distance of the cumulative periodogram from that of white noise, which exceeds its bound once in twenty.
    """

    tag: str
    readings: int
    nis_before: float
    nis_after: float
    whiteness_before: float
    whiteness_after: float
    periodogram_before: float
    periodogram_after: float
    periodogram_bound: float

    @property
    def bound(self) -> float:
        """White innovations stay within this correlation 95 times in 100."""
        return 1.96 / math.sqrt(self.readings) if self.readings else math.nan


@dataclass(frozen=True, eq=False)
class WhitenessCourse:
    """A sensor's innovations on cycles that were not fitted, for a picture, by one set of numbers.

    Shapes: correlation (L,) at lags 1 ... L with what white noise stays within (bound); share (q,) of the power at
    frequencies up to ``frequency`` (q,), in cycles per sample, a few hundred of them at most; the distance from a straight
    line that white noise stays within.
    """

    correlation: Floats
    bound: Floats
    frequency: Floats
    share: Floats
    periodogram_bound: float


@dataclass(frozen=True)
class InnovationCourse:
    """A sensor's pictures: by the file's numbers, and by those fitted; None where nothing was fitted."""

    tag: str
    before: WhitenessCourse
    after: WhitenessCourse | None


@dataclass(frozen=True, eq=False)
class LabCourse:
    """Laboratory results after the fit less their predictions, in the order of sampling, all (n,): when they were sampled
    (UTC microseconds), error, half of the 95 % interval of the error with the interval_scale as it was and as proposed.

    In the estimate's unit, or in the scale of its transform where it has one.
    """

    tag: str
    unit: str
    transformed: bool
    times: NDArray[np.int64]
    error: Floats
    half_before: Floats
    half_after: Floats


@dataclass(frozen=True, slots=True)
class IntervalProposal:
    """One estimate's interval against laboratory results after the fit: shares inside with their 95 % intervals."""

    tag: str
    results: int
    coverage: float
    coverage_low: float
    coverage_high: float
    scale_before: float
    scale: float
    coverage_scaled: float
    reason: str


@dataclass(frozen=True)
class TuningReport:
    """What came of a tuning; ``refusals`` is empty where a new file may be written with ``changes``."""

    unit: str
    first_time: int
    split_time: int
    last_time: int
    fit_cycles: int
    check_cycles: int
    readings: int
    lead_in: int = 0
    """Of the fitted cycles, so many at the beginning only lead in."""
    numbers: tuple[FittedNumber, ...] = ()
    log_likelihood: tuple[float, float] = (math.nan, math.nan)
    """On the fit, before and after."""
    check_log_likelihood: tuple[float, float] = (math.nan, math.nan)
    """On the rest, before and after."""
    sensors: tuple[Whiteness, ...] = ()
    intervals: tuple[IntervalProposal, ...] = ()
    refusals: tuple[str, ...] = ()
    changes: tuple[Change, ...] = ()
    courses: tuple[InnovationCourse, ...] = ()
    """For pictures, a sensor each; empty where too few cycles were left to judge by."""
    lab_courses: tuple[LabCourse, ...] = ()

    @property
    def accepted(self) -> bool:
        return not self.refusals
