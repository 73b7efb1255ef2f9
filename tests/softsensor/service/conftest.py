"""A unit with a story, fed by hand: readings, gaps, late laboratory results, a sensor that goes wrong."""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pytest

from connectors.readings import Quality, Reading
from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.plant_model import PlantModel
from softsensor.cycle import UnitDesign
from softsensor.records.engine import Database, open_database
from softsensor.records.plant import Deed, Revision, register_revision, register_unit
from softsensor.records.upgrade import upgrade_database
from softsensor.records.writer import RecordsWriter
from softsensor.service.plant_state import StateRule
from softsensor.service.recording import Step
from softsensor.service.unit_service import UnitIdentity, UnitService
from softsensor.unit_design import design_unit

START = 1_796_083_200_000_000
STEP = 10_000_000
CYCLES = 400

MODEL = """
[unit]
name = "R-1"
title = "A reactor"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]
validated_range = [9.0, 14.0]

[[input]]
tag = "TI9"
unit = "degC"
operating_point = 60.0
range = [0.0, 100.0]

[[sensor]]
tag = "TI1A"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15
tolerance = 1.0

[[sensor]]
tag = "TI1B"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15
tolerance = 1.0

[[sensor]]
tag = "TI2"
unit = "degC"
operating_point = 80.0
range = [0.0, 200.0]
noise_sd = 0.1
tolerance = 1.0

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]
bias_walk_sd = 0.01
bias_initial_sd = 0.03
lab = { tag = "AL1", sd = 0.02 }

[[disturbance]]
name = "feed concentration"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "FI1"
to = "TI1A"
gain = -1.9
time_constants = ["4.2 min", "0.6 min"]
dead_time = "0.55 min"

[[transfer_function]]
from = "FI1"
to = "TI1B"
gain = -1.9
time_constants = ["4.2 min", "0.6 min"]
dead_time = "0.55 min"

[[transfer_function]]
from = "FI1"
to = "AY1"
gain = 0.1
time_constants = ["8 min"]

[[transfer_function]]
from = "TI9"
to = "TI2"
gain = 0.5
time_constants = ["3 min"]

[[transfer_function]]
from = "feed concentration"
to = "TI1A"
gain = 14.0
time_constants = ["8 min"]

[[transfer_function]]
from = "feed concentration"
to = "TI1B"
gain = 14.0
time_constants = ["8 min"]

[[transfer_function]]
from = "feed concentration"
to = "TI2"
gain = 9.0
time_constants = ["6 min"]
dead_time = "25 s"

[[transfer_function]]
from = "feed concentration"
to = "AY1"
gain = 0.9
time_constants = ["10 min"]

[fault_tests]
false_flag_interval = "30 d"
leave_out_isolated = true
"""


def simulated(model: PlantModel, u: np.ndarray, seed: int) -> np.ndarray:
    """Outputs (cycles, sensors and estimates) of the model, its disturbances drawn, without measuring noise."""
    random = np.random.default_rng(seed)
    spec, part, cycles = model.spec, model.stochastic, len(u)
    points = [item.operating_point for item in spec.sensors] + [
        item.operating_point for item in spec.estimates
    ]
    out = np.tile(points, (cycles, 1))
    x = np.linalg.cholesky(part.P0 + 1e-18 * np.eye(len(part.q))) @ random.standard_normal(len(part.q))
    for k in range(cycles):
        out[k] += part.C @ x
        x = part.A @ x + np.sqrt(part.q) * random.standard_normal(len(part.q))
    for path in model.paths:
        deviation = u[:, path.source] - spec.inputs[path.source].operating_point
        state = path.steady * deviation[0]
        for k in range(cycles):
            recent = deviation[max(k - path.whole_delays, 0)]
            older = deviation[max(k - path.whole_delays - 1, 0)]
            out[k, path.row] += path.c @ state + path.d * (older if path.fraction > 0.0 else recent)
            state = path.phi @ state + path.gamma_recent * recent + path.gamma_older * older
    return out


@dataclass
class Story:
    """What arrives before each cycle, laboratory results among it, in the order of arrival."""

    arrivals: dict[int, list[Reading]] = field(default_factory=dict)

    def add(self, cycle: int, reading: Reading) -> None:
        self.arrivals.setdefault(cycle, []).append(reading)

    def shown_again(self, before: int) -> Iterator[Reading]:
        """The newest reading of each tag that came before a cycle: what a server shows to a new subscriber."""
        newest: dict[str, Reading] = {}
        for cycle in range(before):
            for reading in self.arrivals.get(cycle, []):
                newest[reading.tag] = reading
        yield from newest.values()


def told_story(model: PlantModel, cycles: int = CYCLES) -> Story:
    """Gaps, Bad and Uncertain readings, a step of an input, late results (one impossible), and a bias of TI1B."""
    random = np.random.default_rng(5)
    u = np.tile([item.operating_point for item in model.spec.inputs], (cycles, 1))
    u[120:, 0] += 0.5
    out = simulated(model, u, 7)
    noise = [item.noise_sd for item in model.spec.sensors]
    y = out[:, :3] + random.standard_normal((cycles, 3)) * noise
    y[240:, 1] += 1.5
    story = Story()
    for k in range(cycles):
        before = START + k * STEP - 1_000_000
        if not 200 <= k < 207:
            story.add(k, Reading("FI1", float(u[k, 0]), before))
        story.add(k, Reading("TI9", float(u[k, 1]), before, Quality.BAD if k == 230 else Quality.GOOD))
        if not 40 <= k < 45:
            story.add(k, Reading("TI1A", float(y[k, 0]), before))
        story.add(k, Reading("TI1B", float(y[k, 1]), before, Quality.UNCERTAIN if k == 77 else Quality.GOOD))
        story.add(k, Reading("TI2", float(y[k, 2]), before, Quality.BAD if k == 90 else Quality.GOOD))
    for sampled, arrives, error in ((30, 75, 0.01), (100, 160, -0.02), (180, 215, 2.0), (252, 330, 0.0)):
        if arrives < cycles:
            value = float(out[sampled, 3] + error)
            story.add(arrives, Reading("AL1", value, START + sampled * STEP - 3_000_000))
    return story


@dataclass
class Bench:
    """One database with a unit on it, started and stopped at will."""

    design: UnitDesign
    url: str
    steps: list[Step] = field(default_factory=list)
    cycles_again: int = 0
    states: tuple[StateRule, ...] = ()

    def service(self, database: Database, writer: RecordsWriter) -> UnitService:
        model = self.design.model
        with database.write() as connection:
            unit = register_unit(connection, model.spec.name, model.spec.title, START)
            revision = Revision(model.digest, model.spec.source_text, b"")
            number = register_revision(connection, unit, revision, Deed("someone", "first", START))
        return UnitService(self.design, UnitIdentity(unit, number), database, writer, self.states)

    async def run(self, story: Story, first: int, stop: int, cut: bool = True) -> None:
        """Resume and run cycles first to stop; with ``cut`` it ends in cycle ``stop``, its readings handed over."""
        with open_database(self.url) as database, RecordsWriter(database) as writer:
            service = self.service(database, writer)
            self.cycles_again = service.resume()
            number = (service.coming_cycle(START + first * STEP) - START) // STEP
            for reading in story.shown_again(number):
                service.accept(reading, START + number * STEP - 500_000)
            while number < stop:
                self.steps += await self.cycle(service, story, number)
                number += 1
            if cut and stop in story.arrivals:
                await self.cut_short(service, story, stop)

    async def cycle(self, service: UnitService, story: Story, number: int) -> list[Step]:
        """One cycle with what has arrived by then."""
        self._accept(service, story.arrivals.get(number, ()), number)
        step = await service.run_cycle(START + number * STEP)
        return [] if step is None else [step]

    async def cut_short(self, service: UnitService, story: Story, number: int) -> None:
        """The process ends between a cycle's readings and its results: readings on record, results not."""
        self._accept(service, story.arrivals.get(number, ()), number)
        task = asyncio.create_task(service.run_cycle(START + number * STEP))
        await asyncio.sleep(0)
        task.cancel()
        with pytest.raises(asyncio.CancelledError):
            await task

    @staticmethod
    def _accept(service: UnitService, readings: Iterable[Reading], number: int) -> None:
        for reading in readings:
            service.accept(reading, START + number * STEP - 500_000)


def model_of(text: str) -> PlantModel:
    return build_plant_model(parse_model_text(text, "r1.toml"))


@pytest.fixture(scope="session")
def model_text() -> str:
    """A model file with two thermometers on one temperature, a third elsewhere, and a laboratory."""
    return MODEL


@pytest.fixture(scope="session")
def design() -> UnitDesign:
    """The design of the model file."""
    return design_unit(model_of(MODEL))


@pytest.fixture(scope="session")
def other_design(design: UnitDesign) -> UnitDesign:
    """Another revision of the same unit: one gain differs."""
    return design_unit(model_of(MODEL.replace("gain = 0.9\n", "gain = 0.8\n")))


@pytest.fixture(scope="session")
def story(design: UnitDesign) -> Story:
    """The story of the unit."""
    return told_story(design.model)


@pytest.fixture(scope="session")
def tell() -> Callable[[PlantModel, int], Story]:
    """Tells the story to a model of this form, over so many cycles."""
    return told_story


@pytest.fixture(scope="session")
def new_url(tmp_path_factory: pytest.TempPathFactory) -> Callable[[], str]:
    """Makes an SQLite database."""

    def make() -> str:
        url = f"sqlite:///{(tmp_path_factory.mktemp('records') / 'own.db').as_posix()}"
        upgrade_database(url)
        return url

    return make


@pytest.fixture
def sqlite_url(tmp_path: Path) -> str:
    """An SQLite database of its own."""
    url = f"sqlite:///{(tmp_path / 'own.db').as_posix()}"
    upgrade_database(url)
    return url


@pytest.fixture(scope="session")
def new_bench() -> type[Bench]:
    """Makes a bench for a design and a database."""
    return Bench
