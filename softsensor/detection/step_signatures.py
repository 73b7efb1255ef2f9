"""What a step of an instrument's error leaves in every sensor's innovation, over as long a time as is asked for."""

from __future__ import annotations

from typing import Literal

import numpy as np

from plant_models.plant_model import PlantModel
from softsensor.detection.signatures import SteadyFilter, filter_response, input_error_signal
from softsensor.estimation.kernel import Floats, Ints, Kernel, initial_state

FIRST_WINDOW, LONGEST_WINDOW = 4096, 262_144
SETTLED = 1e-4
"""A signature has settled where its last half changes by no more than this share of its largest value."""

Instrument = Literal["sensor", "input"]


def step_signatures(
    model: PlantModel,
    kernel: Kernel,
    steady: SteadyFilter,
    use: Ints,
    instrument: tuple[Instrument, int],
    cycles: int,
) -> Floats:
    """(cycles, n_sensors) mean of each innovation, in its sd, after the instrument began to read one unit too high.

    Computed until it has settled, and continued from there at its last value; after LONGEST_WINDOW cycles in any case,
    which for what goes on growing errs on the safe side.
    """
    window = min(FIRST_WINDOW, cycles)
    while True:
        signal = _error(model, kernel, instrument, window)
        left: Floats = filter_response(kernel, steady.gains, use, signal) / steady.sd
        moved = np.ptp(left[window // 2 :], axis=0)
        if window >= min(cycles, LONGEST_WINDOW) or np.all(moved <= SETTLED * np.abs(left).max(axis=0)):
            break
        window = min(2 * window, cycles)
    return np.concatenate((left, np.repeat(left[-1:], cycles - window, axis=0)))


def _error(model: PlantModel, kernel: Kernel, instrument: tuple[Instrument, int], window: int) -> Floats:
    source, index = instrument
    if source == "input":
        seen: Floats = input_error_signal(kernel, initial_state(model, kernel), index, window)
        return seen
    signal = np.zeros((window, kernel.n_sensors))
    signal[:, index] = 1.0
    return signal
