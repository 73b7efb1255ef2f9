"""Instruments: lag, noise, resolution, range; and faults put on their readings, status codes included."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal, NamedTuple

SENSOR_FAILURE = 0x808C_0000
"""Bad_SensorFailure, OPC UA Part 8."""
RANGE_EXCEEDED = 0x4094_0000
"""Uncertain_EngineeringUnitsExceeded, OPC UA Part 8."""
LIMITED_LOW = 0x0500
"""Info type DataValue and limit bits low, OPC UA Part 4."""
LIMITED_HIGH = 0x0600

FaultKind = Literal["bias", "drift", "stuck", "noisy", "spike", "lost"]


class PlantReading(NamedTuple):
    """One reading as the plant's own system shows it: UTC microseconds, OPC UA status code (0 is Good)."""

    tag: str
    value: float
    time: int
    status: int


@dataclass(frozen=True, slots=True)
class Instrument:
    """What a transmitter does to the true value. Noise and resolution in the tag's unit, lag in seconds."""

    tag: str
    unit: str
    range: tuple[float, float]
    noise_sd: float
    resolution: float
    lag: float = 0.0


@dataclass(frozen=True, slots=True)
class FaultSpec:
    """One fault of one instrument; times in seconds since the plant's start.

    ======  ===========================================  =====================
    kind    ``size``                                     ``rate``
    ======  ===========================================  =====================
    bias    added to the reading                         not used
    drift   largest error, 0 for none                    added per hour
    stuck   not used                                     not used
    noisy   sd of the noise added                        not used
    spike   added to single readings                     spikes per hour
    lost    not used                                     not used
    ======  ===========================================  =====================
    """

    tag: str
    kind: FaultKind
    start: float
    size: float = 0.0
    rate: float = 0.0
    end: float = math.inf

    def __post_init__(self) -> None:
        if self.kind == "spike" and self.rate <= 0.0:
            raise ValueError(f"{self.tag}: spikes need a rate per hour above zero")
        if not self.start < self.end:
            raise ValueError(f"{self.tag}: a fault ends after its start")

    def acts(self, seconds: float) -> bool:
        """Whether the fault is there at that time."""
        return self.start <= seconds < self.end


class Measured(NamedTuple):
    """An instrument's memory: the lagged true value, the value last shown, its status."""

    lagged: float
    shown: float
    status: int


def follow(instrument: Instrument, lagged: float, true: float, seconds: float) -> float:
    """The lagged value after some seconds at a constant true value: exact first-order lag."""
    if instrument.lag == 0.0:
        return true
    return true + (lagged - true) * math.exp(-seconds / instrument.lag)


def error_of(fault: FaultSpec, seconds: float, scan: float, normal: float) -> float:
    """What a fault adds to the reading; ``normal`` is a standard normal draw, a spike lasts ``scan`` seconds."""
    if fault.kind == "bias":
        return fault.size
    if fault.kind == "drift":
        error = fault.rate * (seconds - fault.start) / 3600.0
        return math.copysign(min(abs(error), abs(fault.size)), error) if fault.size else error
    if fault.kind == "noisy":
        return fault.size * normal
    if fault.kind == "spike":
        period = 3600.0 / fault.rate
        return fault.size if (seconds - fault.start) % period < scan else 0.0
    return 0.0


def on_scale(value: float, resolution: float) -> float:
    """The nearest multiple of the resolution, without the binary dust of the multiplication."""
    return round(round(value / resolution) * resolution, 9)


def measure(
    instrument: Instrument,
    faults: tuple[FaultSpec, ...],
    before: Measured,
    lagged: float,
    seconds: float,
    normals: tuple[float, float],
    scan: float,
) -> Measured:
    """The reading of one scan: noise, faults, range, resolution, status.

    :param normals: two standard normal draws, for the instrument's own noise and for a noisy fault.
    :param scan: seconds for which a reading stands; a spike lasts as long.
    """
    acting = tuple(fault for fault in faults if fault.tag == instrument.tag and fault.acts(seconds))
    if any(fault.kind == "lost" for fault in acting):
        return Measured(lagged, math.nan, SENSOR_FAILURE)
    if any(fault.kind == "stuck" for fault in acting) and not math.isnan(before.shown):
        return Measured(lagged, before.shown, before.status)
    value = lagged + instrument.noise_sd * normals[0]
    value += sum(error_of(fault, seconds, scan, normals[1]) for fault in acting)
    lowest, highest = instrument.range
    if value < lowest:
        return Measured(lagged, lowest, RANGE_EXCEEDED | LIMITED_LOW)
    if value > highest:
        return Measured(lagged, highest, RANGE_EXCEEDED | LIMITED_HIGH)
    return Measured(lagged, on_scale(value, instrument.resolution), 0)
