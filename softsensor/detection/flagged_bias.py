"""What the diagnosis says about a bias beyond the tolerance, beside the probability that is carried on cycle by cycle.

The running evidence of :mod:`softsensor.detection.conformance` sums innovations over blocks of cycles and over a few
onsets, and forgets where the estimate follows an error. A look of the diagnosis is finer: it keeps the sharp onset. So
while a test is up the probability told is that of the latest look, with the rates at which faults and moves come::

    P(nothing) ~ 1,   P(h) ~ rate_h (cycles looked at) (averaged likelihood ratio of h)
    P(beyond) = sum over the sensor's own hypotheses of P(h) P(|size now| > tolerance)

and while a flag is open whose error the estimate follows no less than what the flag says::

    p (P(size > tolerance) + P(size < -tolerance)),   size ~ N(flag's size, its sd),   p the flag's probability
"""

from __future__ import annotations

import numpy as np

from plant_models.specification import SensorSpec
from softsensor.detection.absorbed_faults import quiet_needed
from softsensor.detection.conformance import FAULTS_PER_YEAR, MOVES_PER_YEAR, YEAR_S, upper_tail
from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.diagnosis import FINEST, Likelihoods
from softsensor.detection.flag_sizes import present_size
from softsensor.detection.flags import Flag, FlagBook
from softsensor.detection.outcomes import SHIFT_KINDS
from softsensor.estimation.elementary import exponential
from softsensor.estimation.kernel import Floats

AT_FAULT = 0.5
"""Where no sensor was as probably beyond its tolerance as this, what brought a test up was no sensor's error."""


def beyond_by_look(design: DetectionDesign, found: Likelihoods, cycles: int) -> tuple[float, ...]:
    """(n_sensors,) the probability of a bias beyond the tolerance, by one look at ``cycles`` cycles."""
    sensors = design.model.scaled.sensors
    top = max(0.0, float(np.max(found.evidence)))
    temper = min(1.0, FINEST / top) if top > 0.0 else 1.0
    years = cycles * design.model.spec.sample_time / YEAR_S
    total, beyond = exponential(-top * temper), [0.0] * len(sensors)
    for h, suspect in enumerate(design.suspects):
        rate = MOVES_PER_YEAR if suspect.source == "disturbance" else FAULTS_PER_YEAR
        weight = 0.5 * rate * years * exponential((float(found.evidence[h]) - top) * temper)
        total += weight
        if suspect.source == "sensor":
            size, sd = present_size(suspect, found, h)
            beyond[suspect.index] += weight * _beyond(sensors[suspect.index].tolerance, size, sd)
    return tuple(value / total for value in beyond)


def beyond_by_flag(sensor: SensorSpec, flag: Flag) -> float:
    """The probability that a sensor's bias lies beyond its tolerance, by its flag alone.

    >>> sensor = SensorSpec("TI1", "degC", 90.0, (0.0, 200.0), 0.1, 0.4)
    >>> flag = Flag("x", "TI1", "bias", 0, 0, None, 0.4, 0.1, 0.96, ("TI1",))
    >>> round(beyond_by_flag(sensor, flag), 6)
    0.48
    """
    return flag.probability * _beyond(sensor.tolerance, flag.size, flag.size_sd)


def _beyond(tolerance: float, size: float, sd: float) -> float:
    return (
        float(upper_tail((tolerance - size) / sd) + upper_tail((tolerance + size) / sd)) if sd > 0.0 else 0.0
    )


def as_diagnosed(design: DetectionDesign, book: FlagBook, cycle: int, beyond: Floats) -> Floats:
    """(N, n_sensors) the conformance probability of cycles from ``cycle`` on, in place, as the diagnosis lets it stand."""
    for i, sensor in enumerate(design.model.spec.sensors):
        if book.excluded(i, cycle):
            continue
        column = beyond[:, i]
        if book.weighed:
            column[:] = book.weighed[i]
        flag = book.find(sensor.tag, SHIFT_KINDS)
        if flag is not None and (flag.flag in book.absorbed or not book.weighed) and _stays(design, flag):
            least = beyond_by_flag(sensor, flag)
            column[~(column >= least)] = least
    return beyond


def _stays(design: DetectionDesign, flag: Flag) -> bool:
    """Is it one whose error the estimate follows, so that sums that are down say nothing?"""
    return quiet_needed(design, flag, np.ones(design.kernel.n_sensors, dtype=np.int64)) is None
