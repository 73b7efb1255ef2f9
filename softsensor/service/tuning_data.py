"""A recorded stretch as tuning takes it: its cycles, which are fitted and which judge the fit, what the likelihood sees."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from connectors.history import History
from plant_models.model_scale import to_model
from plant_models.plant_model import PlantModel
from plant_models.schedules import slowest_lag
from softsensor.cycle import UnitDesign, rerun, usable, usable_inputs
from softsensor.detection.flags import FlagBook
from softsensor.estimation.kernel import Floats, initial_state
from softsensor.estimation.noise_tuning.deviations import Deviations, deviations
from softsensor.readings_of_cycle import CycleQuality, CycleReadings, slice_readings
from softsensor.service.assembly import assemble_history

FIT_SHARE = 0.6
"""Share of the history that is fitted; the rest judges the fit."""
LEAD_IN = 0.05
"""At most this share of the fit only leads in: the inputs before the history are not known."""
SETTLED = 3.0
"""Slowest time constants of the inputs' paths after which the lead-in ends."""


@dataclass(frozen=True)
class TuningData:
    """A history as it is tuned on: cycles, readings as shown (``y``), which cycles are fitted, what the likelihood sees."""

    design: UnitDesign
    readings: CycleReadings
    y: Floats
    split: int
    lead_in: int
    seen: Deviations


def tuning_data(design: UnitDesign, recorded: History | CycleReadings) -> TuningData:
    """Cycles from the first that has every input, and what the likelihood sees of them.

    :param recorded: a history, or cycles on record that follow each other without a gap.
    """
    model = design.model
    readings = assemble_history(model.spec, recorded) if isinstance(recorded, History) else recorded
    complete = np.flatnonzero(np.all(np.isfinite(readings.u), axis=1))
    first = int(complete[0]) if len(complete) else len(readings)
    readings = slice_readings(readings, first, len(readings))
    y, scale = usable(design, readings)
    doubtful = np.any(readings.u_quality > CycleQuality.UNCERTAIN, axis=1).astype(np.int64)
    in_scale = to_model(model.spec.sensors, y)
    seen = deviations(model, usable_inputs(design, readings), in_scale, scale, doubtful)
    split = int(FIT_SHARE * len(readings))
    return TuningData(design, readings, y, split, min(_settling(model), int(LEAD_IN * split)), seen)


def _settling(model: PlantModel) -> int:
    """Cycles after which what came before the history no longer shows in any path from an input."""
    longest = 0.0
    for path in model.paths:
        sizes = np.abs(np.linalg.eigvals(path.phi)) if path.phi.size else np.zeros(0)
        slow = sizes[(sizes > 0.0) & (sizes < 1.0 - 1e-9)]
        decay = -SETTLED / float(np.log(slow.max())) if slow.size else 0.0
        longest = max(longest, path.whole_delays + 1 + decay)
    for number, scheduled in model.scheduled:
        decay = SETTLED * slowest_lag(scheduled) / model.spec.sample_time
        longest = max(longest, model.paths[number].whole_delays + 1 + decay)
    return math.ceil(longest)


def beyond_gates(design: UnitDesign, data: TuningData) -> NDArray[np.bool_]:
    """(N, m) true where a reading lies beyond its sensor's gate and is not used."""
    state = initial_state(design.model, design.kernel)
    _, out = rerun(design, state, FlagBook(), 0, data.readings, ())
    return np.asarray(np.isfinite(out.innovation) & (out.used == 0), dtype=np.bool_)


def standardised(design: UnitDesign, data: TuningData) -> Floats:
    """Innovations over their sd (N, m) of the live cycle without tests; nan where there is no reading."""
    state = initial_state(design.model, design.kernel)
    _, out = rerun(design, state, FlagBook(), 0, data.readings, ())
    z = np.asarray(out.innovation / out.innovation_sd, dtype=np.float64)
    z[~np.isfinite(data.seen.z)] = np.nan
    return z
