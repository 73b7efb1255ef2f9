"""The plant's side of the demonstration: a simulated reactor on a faster clock, served over OPC UA."""

from __future__ import annotations

import asyncio
from dataclasses import dataclass, field

from connectors.opcua.analog_item import EngineeringUnit
from connectors.opcua.tag_server import ServedTag, TagServer
from plant_models.plant_model import PlantModel
from plant_models.simulators.reactor_plant import LabResult, StirredTank
from plant_models.simulators.scenario import DemoScenario
from plant_models.units import engineering_units
from softsensor.service.clock import ScaledClock, SystemClock, wait_until

NAMESPACE = "urn:example:plant"


@dataclass
class Truth:
    """What the simulator knows and no instrument shows: times in UTC microseconds, concentrations in mol/L."""

    times: list[int] = field(default_factory=list)
    values: list[float] = field(default_factory=list)
    labs: list[LabResult] = field(default_factory=list)


def served_tags(model: PlantModel) -> list[ServedTag]:
    """Every tag that the model reads, with its unit and range, and the laboratory's."""
    spec = model.spec
    tags = [(item.tag, item.unit, item.range) for item in spec.inputs]
    tags += [(item.tag, item.unit, item.range) for item in spec.sensors]
    tags += [(item.lab.tag, item.unit, item.range) for item in spec.estimates if item.lab is not None]
    served = []
    for tag, unit, limits in tags:
        _, unit_id, display = engineering_units(unit)
        served.append(ServedTag(tag, spec.name, EngineeringUnit(display, unit_id), limits, "simulated"))
    return served


@dataclass(frozen=True)
class SimulatedPlant:
    """The reactor, ``speed`` times as fast as the wall's clock.

    ``reached`` is set after ``until``, a plant time, or never with None. The plant goes on after that time, as plants
    do; the truth is kept up to it.
    """

    tank: StirredTank
    speed: float
    until: int | None
    truth: Truth
    reached: asyncio.Event = field(default_factory=asyncio.Event)

    async def begin(self, server: TagServer) -> None:
        """Show the readings of the start; the plant's time stands still until :meth:`run`."""
        await self._serve(server, self.tank.start, self.tank.start - 1)

    async def run(self, server: TagServer) -> None:
        """Serve the plant's readings at their times, until cancelled."""
        clock = ScaledClock(self.tank.start, SystemClock().now(), self.speed)
        reported = self.tank.start
        moment = self.tank.start + round(self.tank.scenario.sample_time * 1e6)
        while True:
            if self.until is not None and moment > self.until:
                self.reached.set()
            self.tank.advance(moment)
            await wait_until(clock, moment)
            await self._serve(server, moment, reported)
            reported = moment
            moment += round(self.tank.scenario.sample_time * 1e6)
            await asyncio.sleep(0)

    async def _serve(self, server: TagServer, moment: int, reported: int) -> None:
        for reading in self.tank.readings_now:
            await server.write(reading.tag, reading.value, reading.time, reading.status)
        if not self.reached.is_set():
            self.truth.times.append(moment)
            self.truth.values.append(self.tank.truth.product)
        for lab in self.tank.lab_results(reported):
            await server.write(lab.tag, lab.value, lab.sampled_at, 0)
            self.truth.labs.append(lab)


def demo_tank(story: DemoScenario, start: int) -> StirredTank:
    """The reactor with the demonstration's story, from a plant time on."""
    return StirredTank(story.scenario(), start)
