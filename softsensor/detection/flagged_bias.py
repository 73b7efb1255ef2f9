"""What an open flag says about a bias beyond the tolerance, beside the probability that is carried on cycle by cycle.

The running evidence of :mod:`softsensor.detection.conformance` sums innovations over blocks of cycles, and forgets where the
estimate follows an error. A flag is the finer look: it keeps the sharp onset, and it stays while nothing has shown that
the error is gone. So the conformance probability is never told as less than what an open flag says::

    p (P(size > tolerance) + P(size < -tolerance)),   size ~ N(flag's size, its sd),   p the flag's probability
"""

from __future__ import annotations

from plant_models.specification import SensorSpec
from softsensor.detection.conformance import upper_tail
from softsensor.detection.flags import Flag, FlagBook
from softsensor.detection.outcomes import SHIFT_KINDS
from softsensor.estimation.kernel import Floats


def beyond_by_flag(sensor: SensorSpec, flag: Flag) -> float:
    """The probability that a sensor's bias lies beyond its tolerance, by its flag alone.

    >>> sensor = SensorSpec("TI1", "degC", 90.0, (0.0, 200.0), 0.1, 0.4)
    >>> flag = Flag("x", "TI1", "bias", 0, 0, None, 0.4, 0.1, 0.96, ("TI1",))
    >>> round(beyond_by_flag(sensor, flag), 6)
    0.48
    """
    above = upper_tail((sensor.tolerance - flag.size) / flag.size_sd)
    below = upper_tail((sensor.tolerance + flag.size) / flag.size_sd)
    return float(flag.probability * (above + below))


def no_less_than_flags(sensors: tuple[SensorSpec, ...], book: FlagBook, cycle: int, beyond: Floats) -> Floats:
    """(N, n_sensors) the conformance probability of cycles from ``cycle`` on, not below what flags open then say."""
    for i, sensor in enumerate(sensors):
        flag = book.find(sensor.tag, SHIFT_KINDS)
        if flag is not None and not book.excluded(i, cycle):
            least, column = beyond_by_flag(sensor, flag), beyond[:, i]
            column[~(column >= least)] = least
    return beyond
