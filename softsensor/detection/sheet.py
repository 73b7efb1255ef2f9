"""The detectability sheet of a unit: per sensor what its own tests find, and what a fault so found is taken for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

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
    step_signature,
    watched,
)
from softsensor.detection.follow_up import DetectionDesign
from softsensor.detection.isolability import Diagnostician, Isolation, SensorFault
from softsensor.detection.run_length import average_run_length
from softsensor.detection.signatures import Shape

NAMED = 0.9
"""A fault whose sensor is named alone less often than this has something that it cannot be told apart from."""
_DAY_PLACE = 2
"""Place of 24 h among the HORIZONS."""


@dataclass(frozen=True, slots=True)
class FaultTold:
    """A fault of a sensor as the diagnosis sees it: ``size`` in the sensor's unit, a ramp's per day; ``within``: seconds in
    which 90 % of them are found. ``named``: probability that the diagnosis names the sensor, and alone, where the test
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


def detectability_sheet(design: DetectionDesign) -> tuple[SheetLine, ...]:
    """Every sensor of a unit, all of them in use.

    :raises RealisationError: the filter does not settle.
    """
    asked = Diagnostician(design)
    return tuple(sheet_line(design, asked, i, shift) for i, shift in enumerate(sensor_shifts(design.model)))


def sheet_line(design: DetectionDesign, asked: Diagnostician, index: int, shift: SensorShift) -> SheetLine:
    """One sensor of a unit."""
    spec = design.model.spec
    sensor, bank = spec.sensors[index], bank_of(design.tests, index)
    use = np.ones(design.kernel.n_sensors, dtype=np.int64)
    steady, _ = design.table(use)
    cycles = max(1, *horizon_cycles(spec.sample_time))
    signature = step_signature(design.kernel, steady, use, index, cycles)
    tests = watched(bank, signature, spec.sample_time, spec.false_flag_interval)
    found = findable(tests, Sizes(sensor.tolerance, sensor.range[1] - sensor.range[0]))
    delay = _delay(bank, shift.settled) * spec.sample_time
    return SheetLine(
        shift,
        bank.references,
        bank.intervals,
        found,
        delay,
        is_absorbed(delay, spec.false_flag_interval),
        _told(asked, index, tests, _worth_asking(found, sensor.tolerance)),
    )


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
    asked: Diagnostician, index: int, tests: Watched, faults: list[tuple[Shape, float]]
) -> tuple[FaultTold, ...]:
    told = []
    for shape, size in faults:
        of_cycle = size if shape == "step" else size * tests.sample_time / DAY
        within = tests.seconds_until_found(shape, of_cycle)
        usual = tests.seconds_until_found(shape, of_cycle, 0.5)
        if within is None or usual is None:
            continue
        age = round(usual / tests.sample_time)
        answer: Isolation = asked.ask(SensorFault(index, shape, of_cycle, age))
        told.append(FaultTold(shape, size, within, answer.named, answer.alike))
    return tuple(told)
