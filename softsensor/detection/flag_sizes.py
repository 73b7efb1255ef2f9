"""How large the error is that a flag names, with its standard deviation."""

from __future__ import annotations

import numpy as np

from plant_models.model_scale import bias_in_unit
from softsensor.detection.detection_design import DetectionDesign, explanations
from softsensor.detection.diagnosis import Likelihoods
from softsensor.detection.signatures import Hypothesis
from softsensor.detection.state_of_tests import TestState
from softsensor.estimation.gate import FOLLOWED

GATED_SHARE = 0.2
"""Of a size that rests on readings about which the gate had kept others out: its further standard deviation. From trials."""


def present_size(suspect: Hypothesis, found: Likelihoods, best: int) -> tuple[float, float]:
    """Size of the error now, with its sd: a ramp has run for as many cycles as its onset lies back."""
    factor = float(found.age[best]) if suspect.shape == "ramp" else 1.0
    return float(found.size[best]) * factor, float(found.size_sd[best]) * factor


def size_in_unit(
    design: DetectionDesign, tests: TestState, found: Likelihoods, best: int
) -> tuple[float, float]:
    """An instrument's error now, with its sd, in the engineering unit at the operating point; a gain's as a share of it."""
    suspect = explanations(design)[best]
    size, size_sd = present_size(suspect, found, best)
    if suspect.source == "sensor":
        size, size_sd = bias_in_unit(design.model.spec.sensors[suspect.index], size, size_sd)
    elif suspect.source == "input":
        size, size_sd = bias_in_unit(design.model.spec.inputs[suspect.index], size, size_sd)
    if _gated(tests, suspect, int(found.age[best])):
        size_sd = float(np.hypot(size_sd, GATED_SHARE * size))
    return size, size_sd


def _gated(tests: TestState, suspect: Hypothesis, age: int) -> bool:
    """Has the gate kept readings of a sensor out about the onset, ``age`` cycles back? The filter then takes the rest in
    sooner than the settled one, which signatures suppose.
    """
    cycle, window = int(tests.cycle[0]) - age, len(tests.ring)
    about = np.arange(max(cycle - FOLLOWED, 0), cycle + 1) % window
    return suspect.source == "sensor" and bool(np.any(np.isnan(tests.ring[about, suspect.index])))
