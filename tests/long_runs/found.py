"""The sheet against reality: faults of the size on the sheet, put into simulated plants; how many are found in time?

    python tests/long_runs/found.py [injections] [model ...] [7d]

Found: a test of the sensor goes up within the time, whatever the diagnosis makes of it. Runs whose test is up at the onset
already do not count. With "7d" only the last column of the sheet is tried, which takes longer than the others together.
"""

from __future__ import annotations

import sys
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from independent.transfer_paths import Array
from long_runs.models import MODELS, design_named
from long_runs.simulated_plant import Case, Plant, replay_of, seen_by, still_inputs

from softsensor.cycle import UnitDesign
from softsensor.detection.detectability import DAY, HORIZONS
from softsensor.detection.flags import Flag
from softsensor.detection.sheet import SheetLine, detectability_sheet
from softsensor.detection.signatures import Shape

LEAST, MOST = 0.84, 0.95
BEFORE = 400
SHAPES: tuple[Shape, ...] = ("step", "ramp")


def bias_of(design: UnitDesign, fault: tuple[int, Shape, float], times: tuple[int, int]) -> Array:
    """(cycles, n_sensors) what is added to the readings.

    ``fault``: sensor, shape, size (a ramp's per day); ``times``: cycles before the onset and after it.
    """
    spec, (index, shape, size), (before, after) = design.model.spec, fault, times
    bias = np.zeros((before + after, len(spec.sensors)))
    course = size * np.ones(after)
    if shape == "ramp":
        course = size * spec.sample_time / DAY * np.arange(1, after + 1)
    bias[before:, index] = course
    return bias


def put_in(
    design: UnitDesign, fault: tuple[int, Shape, float], times: tuple[int, int], runs: int
) -> list[tuple[bool, list[Flag]]]:
    """Per run whose test is down at the onset: did the sensor's own test go up within the time, and the flags opened."""
    spec, index, before = design.model.spec, fault[0], times[0]
    plant, found = Plant(spec, 41), []
    for _ in range(runs):
        case = Case(still_inputs(spec, sum(times)), bias=bias_of(design, fault, times))
        seen = seen_by(design, case, plant.readings(case)[1], keep=True)
        top = np.concatenate([np.maximum(part.high, part.low)[:, index] for part in seen.parts])
        if top[before - 1] < 1.0:
            opened = [flag for flag in seen.flags if flag.cleared is None]
            found.append((bool(np.any(top[before:] > 1.0)), opened))
    return found


def in_time(
    design: UnitDesign, fault: tuple[int, Shape, float], times: tuple[int, int], runs: int
) -> list[bool]:
    """The first half of what :func:`put_in` says; a run ends where it is decided."""
    spec, plant = design.model.spec, Plant(design.model.spec, 41)
    found = []
    for _ in range(runs):
        case = Case(still_inputs(spec, sum(times)), bias=bias_of(design, fault, times))
        up = _goes_up(design, case.u, plant.readings(case)[1], (fault[0], times[0]))
        if up is not None:
            found.append(up)
    return found


def _goes_up(design: UnitDesign, u: Array, y: Array, place: tuple[int, int]) -> bool | None:
    """Does the sensor's test go up after the onset? None where it is up at the onset. ``place``: sensor, onset."""
    index, onset = place
    for stretch in replay_of(design, [(u, y)]).stretches():
        results = stretch.results
        top = np.maximum(results.high, results.low)[:, index] > 1.0
        cycles = results.first + np.arange(len(results))
        if np.any(top & (cycles == onset - 1)):
            return None
        if np.any(top & (cycles >= onset)):
            return True
    return False


def share_found(
    design: UnitDesign, line: SheetLine, place: tuple[int, Shape, int], runs: int
) -> float | None:
    """The share found of a fault of the sheet's size within HORIZONS[place[2]]; None where the sheet has no size."""
    index, shape, horizon = place
    size = (line.found.steps if shape == "step" else line.found.ramps)[horizon]
    if size is None:
        return None
    cycles = int(HORIZONS[horizon] / design.model.spec.sample_time)
    return float(np.mean(in_time(design, (index, shape, size), (BEFORE, cycles), runs)))


def report(runs: int = 300, names: tuple[str, ...] = MODELS, horizons: tuple[int, ...] = (0, 1, 2)) -> str:
    """As Markdown, one row per sensor."""
    hours = [f"{HORIZONS[place] / 3600.0:.0f} h" for place in horizons]
    heads = [f"{shape} {hour}" for shape in SHAPES for hour in hours]
    lines = ["| model | sensor | " + " | ".join(heads) + " |", "|---" * (len(heads) + 2) + "|"]
    inside = total = 0
    for name in names:
        design = design_named(name)
        for index, line in enumerate(detectability_sheet(design.detection).sensors):
            cells = []
            for shape in SHAPES:
                for place in horizons:
                    share = share_found(design, line, (index, shape, place), runs)
                    cells.append("no size" if share is None else f"{100.0 * share:.1f} %")
                    total += share is not None
                    inside += share is not None and LEAST <= share <= MOST
            lines.append(f"| {name} | {line.shift.tag} | " + " | ".join(cells) + " |")
    return "\n".join([*lines, "", f"Between 84 and 95 %: {inside} of {total}."])


if __name__ == "__main__":
    words = [word for word in sys.argv[2:] if word != "7d"]
    columns = (3,) if "7d" in sys.argv else (0, 1, 2)
    print(report(int(sys.argv[1]) if len(sys.argv) > 1 else 300, tuple(words) or MODELS, columns))
