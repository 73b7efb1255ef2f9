"""Laboratory results: when they count, whether they can be right, and what is the matter when they cannot."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from softsensor.estimation.kernel import Floats

IMPOSSIBLE = 5.0
"""A result this many standard deviations from its prediction cannot be right: once in 1.7 million when the model is."""
FITS = 2.0
"""A result within this many standard deviations of the estimate at another time may belong to that time."""
SEARCH_HOURS = 4.0
"""Sampling times that are wrong by more are not looked for: a wandering estimate fits any value at some time."""
HOUR_US = 3_600_000_000

LabStatus = Literal["used", "waiting for a person", "left out"]


@dataclass(frozen=True, slots=True)
class LabArrival:
    """One result as it arrives; times in UTC microseconds, time_uncertainty in seconds (one standard deviation).

    ``decided_at`` is set where a person has since decided that it is to be used although it was left out: it arrives
    once more, at that time.
    """

    estimate: int
    tag: str
    sampled: int
    reported: int
    value: float
    time_uncertainty: float = 0.0
    decided_at: int | None = None

    @property
    def arrived(self) -> int:
        """When it arrives: once reported, or once decided."""
        return self.reported if self.decided_at is None else self.decided_at


@dataclass(frozen=True, slots=True)
class LabOutcome:
    """What became of a result: the cycle it counts at, its prediction beforehand, its innovation with its sd."""

    arrival: LabArrival
    arrived_cycle: int
    counted_cycle: int
    predicted: float
    innovation: float
    sd: float
    status: LabStatus
    reason: str = ""
    replaces: tuple[float, ...] = ()
    """Earlier values of the same sample that counted until now."""


def replaced_by(value: float) -> str:
    """Why a result no longer counts: the laboratory has corrected it."""
    return f"replaced by {value:.6g}, which was reported later for the same sample"


def with_corrections(outcomes: Iterable[LabOutcome]) -> list[LabOutcome]:
    """Outcomes in the order of arrival; those whose sample has a value in use that was reported later are left out."""
    found: list[LabOutcome] = []
    places: dict[tuple[int, int], list[int]] = {}
    for outcome in outcomes:
        arrival = outcome.arrival
        same = places.setdefault((arrival.estimate, arrival.sampled), [])
        if outcome.status == "used":
            for k in same:
                if found[k].arrival.reported < arrival.reported:
                    reason = replaced_by(arrival.value)
                    found[k] = replace(found[k], counted_cycle=-1, status="left out", reason=reason)
        same.append(len(found))
        found.append(outcome)
    return found


def counting_cycle(sampled: int, first_time: int, sample_us: int) -> int:
    """The first cycle at or after the sampling time; negative where that lies before the first cycle.

    >>> counting_cycle(25, 0, 10), counting_cycle(20, 0, 10)
    (3, 2)
    """
    return -((first_time - sampled) // sample_us)


def slope_variance(estimate: Floats, row: int, sample_s: float, time_uncertainty: float) -> float:
    """(slope * time uncertainty)^2 of one estimate's course (N,) around a row, in its unit squared."""
    if time_uncertainty <= 0.0 or len(estimate) < 2:
        return 0.0
    reach = max(1, round(time_uncertainty / sample_s))
    low, high = max(row - reach, 0), min(row + reach, len(estimate) - 1)
    if high <= low:
        return 0.0
    slope = (float(estimate[high]) - float(estimate[low])) / ((high - low) * sample_s)
    return (slope * time_uncertainty) ** 2


def likely_reason(
    value: float, lab_sd: float, sampled: int, times: NDArray[np.int64], estimate: Floats, sd: Floats
) -> str:
    """Why a result cannot be right: it fits the estimate at another time (sampling time), or at none (value)."""
    near = np.abs(times - sampled) <= SEARCH_HOURS * HOUR_US
    fits = near & (np.abs(value - estimate) <= FITS * np.sqrt(sd**2 + lab_sd**2))
    if not np.any(fits):
        return f"value: fits the estimate at no time within {SEARCH_HOURS:g} h of its sampling time"
    candidates = times[fits]
    best = int(candidates[np.argmin(np.abs(candidates - sampled))])
    minutes = (best - sampled) / 60e6
    direction = "later" if minutes > 0 else "earlier"
    return f"sampling time: fits the estimate {abs(minutes):.0f} min {direction} than stated"
