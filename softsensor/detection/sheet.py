"""The detectability sheet of a unit: which faults of which instrument are found, and what they are taken for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from plant_models.model_scale import scale_at_operating_point
from plant_models.units import difference_unit
from softsensor.detection.absorption import SensorShift, is_absorbed, sensor_shifts
from softsensor.detection.detectability import (
    DAY,
    Bank,
    Findable,
    Sizes,
    Watched,
    bank_of,
    findable,
    horizon_cycles,
    watched,
)
from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.isolability import Diagnostician, InstrumentFault, Isolation
from softsensor.detection.run_length import average_run_length
from softsensor.detection.signatures import Shape
from softsensor.detection.step_signatures import Instrument, step_signatures
from softsensor.estimation.kernel import Floats

NAMED = 0.9
"""A fault whose sensor is named alone less often than this has something that it cannot be told apart from."""
_DAY_PLACE = 2
"""Place of 24 h among the HORIZONS."""


@dataclass(frozen=True, slots=True)
class FaultTold:
    """An instrument's fault as the diagnosis sees it: ``size`` in the instrument's unit, a ramp's per day; ``within``:
    seconds in which 90 % of them are found. ``named``: probability that the diagnosis names it, and alone, where the test
    goes up after the time in which half of them are found; ``alike``: what it cannot be told apart from then.
    """

    shape: Shape
    size: float
    within: float
    named: float
    alike: tuple[tuple[str, float], ...]


@dataclass(frozen=True, slots=True)
class SheetLine:
    """One sensor.

    ``delay``: mean seconds to a flag under what a lasting bias of its tolerance leaves in the end, sums at zero, by the
    quickest of its sums; ``absorbed``: that is more than a tenth of the false-flag interval, so that a flag is hardly
    better than a false one. ``told``: a step of its tolerance, or the smallest found where that is larger; and a drift of
    its tolerance in a day, or the slowest found in a day where that is quicker.
    """

    shift: SensorShift
    references: tuple[float, ...]
    intervals: tuple[float, ...]
    found: Findable
    delay: float
    absorbed: bool
    told: tuple[FaultTold, ...]

    @property
    def untold(self) -> int:
        """How many of the two faults are not found at all, or not named alone often enough."""
        return 2 - sum(fault.named >= NAMED for fault in self.told)


@dataclass(frozen=True, slots=True)
class InputLine:
    """The instrument of one input, whose error shows in the sensors alone: any sensor's sums may find it.

    ``plausible``: an error that the diagnosis thinks likely, a tenth of the working range; it stands for the tolerance.
    """

    tag: str
    unit: str
    plausible: float
    found: Findable
    told: tuple[FaultTold, ...]


@dataclass(frozen=True, slots=True)
class Sheet:
    """Of a whole unit."""

    sensors: tuple[SheetLine, ...]
    inputs: tuple[InputLine, ...]


def detectability_sheet(design: DetectionDesign) -> Sheet:
    """Every sensor and every input's instrument of a unit, all sensors in use.

    :raises RealisationError: the filter does not settle.
    """
    asked = Diagnostician(design)
    return Sheet(
        tuple(sheet_line(design, asked, i, shift) for i, shift in enumerate(sensor_shifts(design.model))),
        tuple(_input_line(design, asked, i) for i in range(len(design.model.spec.inputs))),
    )


def sheet_line(design: DetectionDesign, asked: Diagnostician, index: int, shift: SensorShift) -> SheetLine:
    """One sensor of a unit, found by its own sums."""
    spec = design.model.spec
    sensor, bank = spec.sensors[index], bank_of(design.tests, index)
    tests = _own_sums(design, index)
    found = findable(tests, _sizes(design, index))
    scale = scale_at_operating_point(sensor)
    delay = _delay(bank, shift.settled) * spec.sample_time
    return SheetLine(
        shift,
        bank.references,
        bank.intervals,
        found,
        delay,
        is_absorbed(delay, spec.false_flag_interval),
        _told(asked, ("sensor", index), tests, _worth_asking(found, sensor.tolerance), scale),
    )


def _own_sums(design: DetectionDesign, index: int) -> Watched:
    spec = design.model.spec
    scale = scale_at_operating_point(spec.sensors[index])
    signature = scale * _signatures(design, ("sensor", index))[:, index]
    return watched([(bank_of(design.tests, index), signature)], spec.sample_time, spec.false_flag_interval)


def findable_by_own_sums(design: DetectionDesign, index: int) -> Findable:
    """What of one sensor's faults its own sums find, without asking what they would be taken for."""
    return findable(_own_sums(design, index), _sizes(design, index))


def _sizes(design: DetectionDesign, index: int) -> Sizes:
    sensor = design.model.spec.sensors[index]
    return Sizes(sensor.tolerance, sensor.range[1] - sensor.range[0])


def _input_line(design: DetectionDesign, asked: Diagnostician, index: int) -> InputLine:
    spec = design.model.spec
    item = spec.inputs[index]
    scale = scale_at_operating_point(item)
    signatures = scale * _signatures(design, ("input", index))
    looking = [
        (bank_of(design.tests, j), signatures[:, j])
        for j in range(len(spec.sensors))
        if np.any(signatures[:, j] != 0.0)
    ]
    tests = watched(looking, spec.sample_time, spec.false_flag_interval)
    plausible = next(
        suspect.prior_sd / scale
        for suspect in design.suspects
        if (suspect.source, suspect.index, suspect.shape) == ("input", index, "step")
    )
    found = findable(tests, Sizes(plausible, item.range[1] - item.range[0]))
    told = _told(asked, ("input", index), tests, _worth_asking(found, plausible), scale)
    return InputLine(item.tag, difference_unit(item.unit), plausible, found, told)


def _signatures(design: DetectionDesign, instrument: tuple[Instrument, int]) -> Floats:
    use = np.ones(design.kernel.n_sensors, dtype=np.int64)
    steady, _ = design.table(use)
    cycles = max(1, *horizon_cycles(design.model.spec.sample_time))
    return step_signatures(design.model, design.kernel, steady, use, instrument, cycles)


def _delay(bank: Bank, shift: float) -> float:
    """Mean cycles to a flag under a lasting shift, by the quickest of the sums: the bank is no slower."""
    return min(
        average_run_length(k, h, shift, clip=bank.clip)
        for k, h in zip(bank.references, bank.intervals, strict=True)
    )


def _worth_asking(found: Findable, tolerance: float) -> list[tuple[Shape, float]]:
    """The step and the ramp (per day) that the diagnosis is asked about."""
    faults: list[tuple[Shape, float]] = []
    step = tolerance if found.tolerance_within is not None else _of_a_day(found.steps)
    if step is not None:
        faults.append(("step", step))
    ramp = _of_a_day(found.ramps)
    if ramp is not None:
        faults.append(("ramp", max(ramp, tolerance)))
    return faults


def _of_a_day(sizes: tuple[float | None, ...]) -> float | None:
    """The size found in a day; where none is, the one found in a longer time."""
    return next((size for size in sizes[_DAY_PLACE:] if size is not None), None)


def _told(
    asked: Diagnostician,
    instrument: tuple[Instrument, int],
    tests: Watched,
    faults: list[tuple[Shape, float]],
    scale: float,
) -> tuple[FaultTold, ...]:
    """What the diagnosis makes of faults of these sizes; ``scale``: model units per unit of the instrument."""
    told = []
    for shape, size in faults:
        of_cycle = size if shape == "step" else size * tests.sample_time / DAY
        within = tests.seconds_until_found(shape, of_cycle)
        usual = tests.seconds_until_found(shape, of_cycle, 0.5)
        if within is None or usual is None:
            continue
        age = round(usual / tests.sample_time)
        answer: Isolation = asked.ask(InstrumentFault(instrument, shape, scale * of_cycle, age))
        told.append(FaultTold(shape, size, within, answer.named, answer.alike))
    return tuple(told)
