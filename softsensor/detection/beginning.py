"""A run's beginning: how long the model stays wrong about a plant that was moving when the run began.

The input-driven part starts in steady state with the first inputs. Had an input stood elsewhere until then, every path
still carries what it did: predictions are wrong by the paths' free response, and the filter takes part of that for a
disturbance, which it must unlearn. What is left in the innovations is that free response less what the filter makes of
it. It is forgotten once a move of MOVE of each input's range shifts no innovation by as much as its test's reference
value, because below that a cumulative sum does not climb.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from plant_models.plant_model import DiscretePath, PlantModel
from softsensor.detection.signatures import SteadyFilter, filter_response
from softsensor.estimation.kernel import Floats, Kernel

MOVE = 0.25
"""Share of an input's validated range (its instrument's where there is none) that it may have moved unseen."""
LONGEST_S = 6.0 * 3600.0
"""Seconds after which a beginning is over in any case."""
EARLY = 3
"""A sum that began to climb within the dead time and this fraction of the time of forgetting climbed because of the
beginning: in 120 starts of moving library models the latest lay at 0.4 of it, all others below 0.3."""


@dataclass(frozen=True, slots=True)
class Forgetting:
    """In cycles: when the first inputs' past is forgotten, and until when a sum's climb counts as caused by it."""

    until: int
    onset_by: int


def free_response(path: DiscretePath, cycles: int) -> Floats:
    """(cycles,) What a path still gives after its input, one unit off and steady until then, has come back at cycle 0."""
    x, out = path.steady, np.zeros(cycles)
    for k in range(cycles):
        recent, older = float(k < path.whole_delays), float(k <= path.whole_delays)
        out[k] = path.c @ x + path.d * (older if path.fraction > 0.0 else recent)
        x = path.phi @ x + path.gamma_recent * recent + path.gamma_older * older
    return out


def forgetting(model: PlantModel, kernel: Kernel, steady: SteadyFilter, reference: Floats) -> Forgetting:
    """How long a start in a moving plant shows in the innovations.

    :param reference: reference value of each sensor's most sensitive test, in standard deviations (n_sensors,).
    """
    spec = model.scaled
    cycles = max(1, round(LONGEST_S / spec.sample_time))
    use = np.ones(kernel.n_sensors, dtype=np.int64)
    longest = delay = 0
    for j, item in enumerate(spec.inputs):
        signal = np.zeros((cycles, kernel.n_sensors))
        for path in model.paths:
            if path.source == j and path.row < kernel.n_sensors:
                signal[:, path.row] += free_response(path, cycles)
                delay = max(delay, path.whole_delays + 1)
        low, high = item.validated_range or item.range
        shift = MOVE * (high - low) * filter_response(kernel, steady.gains, use, signal) / steady.sd
        seen = np.flatnonzero(np.any(np.abs(shift) >= reference, axis=1))
        longest = max(longest, int(seen[-1]) + 1 if seen.size else 0)
    return Forgetting(longest, min(longest, delay + longest // EARLY))
