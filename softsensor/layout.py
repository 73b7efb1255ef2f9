"""Cycles laid out for the compiled loop: what is a reading, how far each is trusted, what of it counts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from plant_models.model_scale import one_to_model, slopes, to_model
from plant_models.plant_model import PlantModel
from plant_models.specification import Range
from softsensor.block_arrays import (
    BlockInputs,
    BlockOutputs,
    Marks,
    empty_outputs,
    rows_of_inputs,
    rows_of_outputs,
)
from softsensor.cycle_results import outside
from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.flags import FlagBook
from softsensor.estimation.kernel import Floats, Ints, Kernel
from softsensor.readings_of_cycle import CycleQuality, CycleReadings, slice_readings

UNCERTAIN_VARIANCE = 9.0
"""An Uncertain reading counts as one with three times the noise_sd."""
BEYOND_BELOW, BEYOND_ABOVE = 0.025, 0.0625
"""Share of the span below and above a sensor's range beyond which a reading is a failed instrument's, not a reading:
the failure limits 3.6 mA and 21 mA of a 4-20 mA signal (NAMUR NE 43; from memory)."""


@dataclass(frozen=True)
class UnitDesign:
    """One unit's model, its kernel and its tests, made once."""

    model: PlantModel
    kernel: Kernel
    detection: DetectionDesign
    fresh: Ints
    limits: tuple[Floats, Floats]
    """Lowest and highest value of each sensor that is still a reading."""
    scheduled: tuple[tuple[int, Range], ...] = ()
    """Inputs by which transfer functions go, each with the range that their schedules cover."""


@dataclass(frozen=True)
class LabAtCycle:
    """A laboratory result where it counts: cycle, index of its estimate, value in engineering units, variance in
    model scale; its two times (UTC microseconds) tell whether a later value of the same sample takes its place.
    """

    cycle: int
    estimate: int
    value: float
    variance: float
    sampled: int
    reported: int


def usable(design: UnitDesign, readings: CycleReadings) -> tuple[Floats, Floats]:
    """Sensor values with what is no reading taken out, and the factor on each one's noise variance."""
    low, high = design.limits
    bad = readings.y_quality > CycleQuality.UNCERTAIN
    y = np.where(bad | (readings.y < low) | (readings.y > high), np.nan, readings.y)
    scale = np.where(readings.y_quality == CycleQuality.UNCERTAIN, UNCERTAIN_VARIANCE, 1.0)
    return np.ascontiguousarray(y), np.ascontiguousarray(scale)


def usable_inputs(design: UnitDesign, readings: CycleReadings) -> Floats:
    """Input values in model scale."""
    return np.ascontiguousarray(to_model(design.model.spec.inputs, readings.u), dtype=np.float64)


def in_use(book: FlagBook, first: int, cycles: int, n_sensors: int) -> Marks:
    """(cycles, n_sensors): 0 where a sensor is left out of the estimate."""
    use = np.ones((cycles, n_sensors), dtype=np.int8)
    for item in book.exclusions:
        start = max(item.since - first, 0)
        stop = cycles if item.until is None else min(max(item.until - first, 0), cycles)
        use[start:stop, item.sensor] = 0
    return use


@dataclass(frozen=True)
class Laid:
    """Consecutive cycles laid out for the compiled loop, once for all the stretches that they are run in.

    ``data`` has no laboratory results, every sensor in use and no rest; ``out`` is filled as the cycles are run, and results
    share its memory. ``reading`` (N, n_sensors): what results show; ``doubtful`` (N,): the inputs make estimates Uncertain.
    """

    readings: CycleReadings
    data: BlockInputs
    out: BlockOutputs
    reading: Floats
    doubtful: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.readings)

    def rows(self, start: int, stop: int) -> Laid:
        """Rows start to stop; they share the memory of the whole."""
        return Laid(
            slice_readings(self.readings, start, stop),
            rows_of_inputs(self.data, start, stop),
            rows_of_outputs(self.out, start, stop, 0),
            self.reading[start:stop],
            self.doubtful[start:stop],
        )


def laid_out(design: UnitDesign, readings: CycleReadings) -> Laid:
    """Lay cycles out."""
    data = _plain_inputs(design, readings)
    shown = data.raw if data.y is data.raw else np.where(np.isfinite(data.y), data.raw, np.nan)
    out = empty_outputs(len(readings), design.kernel, 0)
    return Laid(readings, data, out, shown, inputs_doubtful(design, readings))


def _plain_inputs(design: UnitDesign, readings: CycleReadings) -> BlockInputs:
    raw, scale = usable(design, readings)
    n, sensors = len(readings), design.model.spec.sensors
    return BlockInputs(
        usable_inputs(design, readings),
        np.ascontiguousarray(to_model(sensors, raw)),
        raw,
        slopes(sensors, raw),
        scale,
        np.ones((n, design.kernel.n_sensors), dtype=np.int8),
        design.fresh,
        np.any(readings.u_quality > CycleQuality.UNCERTAIN, axis=1).view(np.int8),
        np.zeros(n, dtype=np.int8),
        *_labs_within(design, (), 0),
    )


def _labs_within(
    design: UnitDesign, labs: tuple[LabAtCycle, ...], first: int
) -> tuple[Ints, Ints, Floats, Floats]:
    estimates = design.model.spec.estimates
    return (
        np.array([lab.cycle - first for lab in labs], dtype=np.int64),
        np.array([design.kernel.n_sensors + lab.estimate for lab in labs], dtype=np.int64),
        np.array([one_to_model(estimates[lab.estimate], lab.value) for lab in labs], dtype=np.float64),
        np.array([lab.variance for lab in labs], dtype=np.float64),
    )


def with_book(
    design: UnitDesign, data: BlockInputs, book: FlagBook, first: int, labs: tuple[LabAtCycle, ...]
) -> BlockInputs:
    """Cycles as the flag book has them from cycle ``first`` on: sensors left out, rests; and with laboratory results."""
    n = len(data.u)
    if book.exclusions:
        data = data._replace(use=in_use(book, first, n, design.kernel.n_sensors))
    if book.rest is not None or book.states:
        data = data._replace(quiet=np.array([book.resting(first + k) for k in range(n)], dtype=np.int8))
    if labs:
        at, row, value, variance = _labs_within(design, labs, first)
        data = data._replace(lab_at=at, lab_row=row, lab_value=value, lab_variance=variance)
    return data


def block_inputs(
    design: UnitDesign, book: FlagBook, first: int, readings: CycleReadings, labs: tuple[LabAtCycle, ...]
) -> BlockInputs:
    """Lay readings and laboratory results out for the compiled loop."""
    return with_book(design, _plain_inputs(design, readings), book, first, labs)


def inputs_doubtful(design: UnitDesign, readings: CycleReadings) -> NDArray[np.bool_]:
    """(N,) Where an input is doubtful, or outside its validated range or a schedule."""
    doubtful: NDArray[np.bool_] = np.any(readings.u_quality != CycleQuality.GOOD, axis=1)
    for j, item in enumerate(design.model.spec.inputs):
        if item.validated_range is not None:
            doubtful |= outside(readings.u[:, j], item.validated_range)
    for j, covered in design.scheduled:
        doubtful |= outside(readings.u[:, j], covered)
    return doubtful
