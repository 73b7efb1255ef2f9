"""What came of a tuning: numbers, what the rest of the history says of them, intervals, and refusals."""

from __future__ import annotations

import math
from dataclasses import dataclass

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
    """One sensor's innovations on cycles that were not fitted: nis (1 is right) and lag-one correlation (0 is right)."""

    tag: str
    readings: int
    nis_before: float
    nis_after: float
    whiteness_before: float
    whiteness_after: float

    @property
    def bound(self) -> float:
        """White innovations stay within this correlation 95 times in 100."""
        return 1.96 / math.sqrt(self.readings) if self.readings else math.nan


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
    numbers: tuple[FittedNumber, ...] = ()
    log_likelihood: tuple[float, float] = (math.nan, math.nan)
    """On the fit, before and after."""
    check_log_likelihood: tuple[float, float] = (math.nan, math.nan)
    """On the rest, before and after."""
    sensors: tuple[Whiteness, ...] = ()
    intervals: tuple[IntervalProposal, ...] = ()
    refusals: tuple[str, ...] = ()
    changes: tuple[Change, ...] = ()

    @property
    def accepted(self) -> bool:
        return not self.refusals
