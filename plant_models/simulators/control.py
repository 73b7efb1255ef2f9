"""A temperature controller: proportional-integral, limited output, filtered measurement."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple


@dataclass(frozen=True, slots=True)
class Controller:
    """Settings. Positive gain: the output rises with the measurement (more coolant when it is hotter)."""

    gain: float = 1.7
    """Output unit per unit of the measurement."""
    integral_time: float = 900.0
    filter_time: float = 60.0
    """Seconds of the first-order filter on the measurement."""
    output_range: tuple[float, float] = (1.0, 24.0)


class ControllerState(NamedTuple):
    """Filtered measurement and output."""

    filtered: float
    output: float


def control(
    controller: Controller, state: ControllerState, measurement: float, setpoint: float, seconds: float
) -> ControllerState:
    """One execution, velocity form, so that a limited output does not wind up::

        output += gain ((e - e_before) + e seconds / integral_time),   e = filtered measurement - setpoint

    Without a measurement (nan) the output stands.
    """
    if math.isnan(measurement):
        return state
    filtered = measurement + (state.filtered - measurement) * math.exp(-seconds / controller.filter_time)
    change = (filtered - state.filtered) + (filtered - setpoint) * seconds / controller.integral_time
    lowest, highest = controller.output_range
    return ControllerState(filtered, min(max(state.output + controller.gain * change, lowest), highest))
