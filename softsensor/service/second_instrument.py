"""Which instrument to add: a second one beside each sensor in turn, and what that would mend.

The second instrument has the first one's transfer functions, noise and tolerance; its tests and the diagnosis's signatures
are designed as for any other sensor.
"""

from __future__ import annotations

from dataclasses import dataclass

from plant_models.building import build_plant_model
from plant_models.plant_model import PlantModel
from plant_models.second_instrument import with_second
from softsensor.detection.absorption import sensor_shifts
from softsensor.detection.isolability import Diagnostician
from softsensor.detection.sheet import SheetLine, sheet_line
from softsensor.unit_design import design_unit


@dataclass(frozen=True, slots=True)
class Mend:
    """For a sensor whose faults are absorbed or taken for others: the sensor to set a second instrument beside, and the
    sheet's line that the faulty sensor then has; ``whole``: nothing is left to mend. ``beside`` and ``then`` are None where
    no second instrument makes it better.
    """

    tag: str
    beside: str | None
    then: SheetLine | None
    whole: bool


def mends(model: PlantModel, lines: tuple[SheetLine, ...]) -> tuple[Mend, ...]:
    """For every sensor that needs it, the second instrument that mends the most; of several the one with the slowest drift.

    :raises RealisationError: the filter with a second instrument does not settle.
    """
    ailing = [i for i, line in enumerate(lines) if line.absorbed or line.untold]
    best: dict[int, tuple[str, SheetLine]] = {}
    for j, sensor in enumerate(model.spec.sensors if ailing else ()):
        larger = build_plant_model(with_second(model.spec, j))
        design, shifts = design_unit(larger).detection, sensor_shifts(larger)
        asked = Diagnostician(design)
        for i in ailing:
            line = sheet_line(design, asked, i, shifts[i])
            if _ailment(line) < _ailment(lines[i]) and (i not in best or _rank(line) < _rank(best[i][1])):
                best[i] = (sensor.tag, line)
    found = []
    for i in ailing:
        beside, then = best.get(i, (None, None))
        found.append(Mend(lines[i].shift.tag, beside, then, then is not None and not any(_ailment(then))))
    return tuple(found)


def _ailment(line: SheetLine) -> tuple[bool, int]:
    return line.absorbed, line.untold


def _rank(line: SheetLine) -> tuple[bool, int, float]:
    return *_ailment(line), min((size for size in line.found.ramps if size is not None), default=float("inf"))
