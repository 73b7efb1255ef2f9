"""A model file's content as frozen values, checked once at the border and trusted afterwards.

Times are seconds. Every other number is in the engineering unit of its tag; noise, bias, tolerance and walk are
differences in that unit, at the operating point where the tag has a transform. Gains, and disturbances that enter at an
input, are between transformed values. Gains of integrating paths are per second.
"""

from __future__ import annotations

from dataclasses import dataclass

from plant_models.transform import Transform

Range = tuple[float, float]
GATE = 8.0
"""Standard deviations of the innovation beyond which a single reading is not used, where the file says nothing."""


@dataclass(frozen=True, slots=True)
class InputSpec:
    """A measured input: a manipulated variable or a measured disturbance."""

    tag: str
    unit: str
    operating_point: float
    range: Range
    validated_range: Range | None = None
    max_age: float | None = None
    """Seconds after which a held value makes the estimates Uncertain; None: three sample times."""
    transform: Transform | None = None
    """Transfer functions hold between transformed values."""


@dataclass(frozen=True, slots=True)
class SensorSpec:
    """A measured output."""

    tag: str
    unit: str
    operating_point: float
    range: Range
    noise_sd: float
    tolerance: float
    """Calibration tolerance, the bias worth finding; the file's default is four times noise_sd."""
    validated_range: Range | None = None
    bias_walk_sd: float = 0.0
    """Random-walk offset per square root of an hour; zero for none."""
    bias_initial_sd: float = 0.0
    on_change: bool = False
    """Reported on change only: no news means the same value again."""
    max_age: float | None = None
    gate: float = GATE
    """Standard deviations of the innovation beyond which a single reading is not used."""
    transform: Transform | None = None


@dataclass(frozen=True, slots=True)
class LabSpec:
    """Late laboratory results of an estimate."""

    tag: str
    sd: float


@dataclass(frozen=True, slots=True)
class EstimateSpec:
    """An unmeasured output."""

    tag: str
    unit: str
    operating_point: float
    range: Range
    validated_range: Range | None = None
    bias_walk_sd: float = 0.0
    bias_initial_sd: float = 0.0
    lab: LabSpec | None = None
    interval_scale: float = 1.0
    transform: Transform | None = None
    limits: Range | None = None
    """Physical limits, one of them possibly infinite: what lies beyond cannot be."""


@dataclass(frozen=True, slots=True)
class DisturbanceSpec:
    """An unmeasured disturbance: first-order Gauss-Markov (sd, time_constant) or random walk (walk_sd, initial_sd).

    Exactly one of the two pairs is given. ``at_input`` names the input where it enters, through that input's paths.
    """

    name: str
    sd: float | None = None
    time_constant: float | None = None
    walk_sd: float | None = None
    """Per square root of an hour."""
    initial_sd: float = 0.0
    at_input: str | None = None


@dataclass(frozen=True, slots=True)
class ScheduleSpec:
    """Gain and time constants of a path at ascending values of a measured input, linear in between, held outside.

    ``time_constants``: one tuple for each value, all of one length, in the order in which the lags act.
    """

    tag: str
    at: tuple[float, ...]
    gain: tuple[float, ...]
    time_constants: tuple[tuple[float, ...], ...]


@dataclass(frozen=True, slots=True)
class PathSpec:
    """One transfer function, from an input or a disturbance to a sensor or an estimate.

    Either factored (``numerator is None``)::

        gain * prod(lead_i s + 1) / prod(tau_i s + 1) / (s if integrating else 1) * exp(-dead_time s)

    or polynomial, ``numerator(s) / denominator(s) * exp(-dead_time s)`` in descending powers of s, s in 1/second.
    """

    source: str
    target: str
    gain: float | None = None
    time_constants: tuple[float, ...] = ()
    lead_times: tuple[float, ...] = ()
    dead_time: float = 0.0
    integrating: bool = False
    numerator: tuple[float, ...] | None = None
    denominator: tuple[float, ...] | None = None
    schedule: ScheduleSpec | None = None
    """Where there is one, ``gain`` and ``time_constants`` are those at the operating point of its tag."""


@dataclass(frozen=True, slots=True)
class UnitSpec:
    """A whole model file: one process unit."""

    name: str
    title: str
    sample_time: float
    inputs: tuple[InputSpec, ...]
    sensors: tuple[SensorSpec, ...]
    estimates: tuple[EstimateSpec, ...]
    disturbances: tuple[DisturbanceSpec, ...]
    paths: tuple[PathSpec, ...]
    false_flag_interval: float
    """Wanted mean time between false flags, per sensor, in seconds."""
    leave_out_isolated: bool = False
    """A sensor that the data name alone as faulty is kept from the estimate until a person puts it back."""
    back_by_itself: bool = False
    """A sensor left out so counts again once its readings have agreed for a while with the prediction without it."""
    widening: tuple[tuple[str, float], ...] = ()
    """By sensor, the factor on its decision intervals that commissioning found; 1 where a sensor is not listed."""
    disarmed: tuple[tuple[str, str], ...] = ()
    """Sensors whose tests of innovations are not run, with the reason."""
    patient: tuple[str, ...] = ()
    """Sensors watched by a fourth pair of sums, for shifts so small that they take days to show."""
    late_horizon: float | None = None
    """How late laboratory results and readings may come and still be used, in seconds; None where the file does not say."""
    source_text: str = ""
    """The file's text, kept with the revision."""
