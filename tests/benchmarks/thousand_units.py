"""1,000 units of 8 tags at 1 Hz through the in-memory connector on one core: the longest cycle.

    python tests/benchmarks/thousand_units.py [units] [seconds of plant time] [second of a fault]

Every second 8,000 readings come through :class:`connectors.memory.MemorySource`, each unit assembles its cycle and runs
it with all tests armed, as the live service does, without database and pages. No cycle is late while the longest
second's work takes less than a second. Wall time decides; processor time beside it tells what a busy machine added.

With a fault, the first sensor of every unit is three noise sd off from that second on, so that a diagnosis runs on all of
them at once, and inputs move without any sensor following: nothing explains it all. A full memory (2048 cycles) costs most.
"""

from __future__ import annotations

import asyncio
import os
import sys
import time
from dataclasses import dataclass
from pathlib import Path

if __name__ == "__main__":
    os.environ["OPENBLAS_NUM_THREADS"] = "1"
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from benchmarks.measuring import small_unit

from connectors.memory import MemorySource
from connectors.readings import Reading
from plant_models.building import build_plant_model
from softsensor.cycle import UnitDesign, start
from softsensor.estimation.past import Past
from softsensor.service.assembly import LiveAssembly
from softsensor.service.unit_run import UnitRun
from softsensor.unit_design import design_unit

SECOND = 1_000_000
BEGIN = 1_772_409_600 * SECOND
HORIZON = 3600


@dataclass(frozen=True)
class Unit:
    """One unit's assembly and run."""

    assembly: LiveAssembly
    run: UnitRun


def units_of(count: int, design: UnitDesign) -> dict[str, Unit]:
    spec = design.model.spec
    return {
        f"U{number}": Unit(
            LiveAssembly(spec),
            UnitRun(design, start(design), Past(HORIZON, design.kernel.n_estimates)),
        )
        for number in range(count)
    }


async def run(count: int, seconds: int, fault: int) -> list[tuple[float, float]]:
    """Wall and processor seconds of every second of plant time."""
    design = design_unit(build_plant_model(small_unit(2, 6, 1.0)))
    units, spec, rng = units_of(count, design), design.model.spec, np.random.default_rng(3)
    tags = [(item.tag, item.operating_point, 0.0) for item in spec.inputs]
    tags += [(item.tag, item.operating_point, item.noise_sd) for item in spec.sensors]
    spent, moved = [], np.zeros((count, len(spec.inputs)))

    def shift(unit: int, place: int) -> float:
        """What an input has moved by; the sensors do not follow."""
        return float(moved[unit, place]) if place < len(spec.inputs) else 0.0

    for second in range(seconds):
        now = BEGIN + second * SECOND
        noise = rng.standard_normal((count, len(tags)))
        noise[:, len(spec.inputs)] += 3.0 * (second >= fault)
        if second >= fault:
            moved += np.where(rng.random(moved.shape) < 0.01, 0.1 * rng.standard_normal(moved.shape), 0.0)
        batch = [
            Reading(f"{unit}/{tag}", point + sd * noise[number, place] + shift(number, place), now)
            for number, unit in enumerate(units)
            for place, (tag, point, sd) in enumerate(tags)
        ]
        begun = time.perf_counter(), time.process_time()
        async with MemorySource(queue_size=len(batch)) as source:
            for reading in batch:
                source.put(reading)
            source.finish()
            async for event in source.events():
                assert isinstance(event, Reading)
                unit, _, tag = event.tag.partition("/")
                units[unit].assembly.accept(Reading(tag, event.value, event.time, event.quality))
        for item in units.values():
            item.run.advance(item.assembly.readings_at(now))
        spent.append((time.perf_counter() - begun[0], time.process_time() - begun[1]))
    return spent


def main(count: int = 1000, seconds: int = 120, fault: int = 10**9) -> tuple[float, float]:
    """Run and print; returns the longest second's wall and processor time."""
    spent = asyncio.run(run(count, seconds, fault))[1:]
    wall, processor = (np.array(column) for column in zip(*spent, strict=True))
    late = int((wall > 1.0).sum())
    print(
        f"{count} units of 8 tags at 1 Hz, {seconds} s of plant time (the first, with the start, is not counted)"
    )
    if fault < seconds:
        print(f"  a fault in every unit from second {fault} on")
    print(f"  longest second: {wall.max() * 1e3:.0f} ms wall, {processor.max() * 1e3:.0f} ms processor time")
    print(
        f"  median second:  {np.median(wall) * 1e3:.0f} ms wall, {np.median(processor) * 1e3:.0f} ms processor time"
    )
    print(f"  late: {late} of {len(spent)}; wanted none: {'reached' if late == 0 else 'NOT reached'}")
    return float(wall.max()), float(processor.max())


if __name__ == "__main__":
    main(*(int(word) for word in sys.argv[1:]))
