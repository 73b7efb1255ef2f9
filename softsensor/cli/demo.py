"""``softsensor demo``: the whole job on this machine."""

from __future__ import annotations

import asyncio
import shutil
import socket
import tempfile
import time
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from plant_models.durations import parse_duration
from plant_models.errors import Problem, UnitError

if TYPE_CHECKING:
    from connectors.opcua.tag_server import TagServer
    from plant_models.plant_model import PlantModel
    from plant_models.simulators.scenario import DemoScenario
    from softsensor.demonstration.plant_side import SimulatedPlant
    from softsensor.demonstration.service_side import ServiceProcess

CATCH_UP = 1.0
"""Seconds on the wall that the service is given to finish the last cycles."""


class DemoError(Problem):
    """The demonstration cannot go on."""


def demo(
    duration: Annotated[
        str | None,
        typer.Option("--duration", help='Plant time after which it ends, such as "8 h"; else on Ctrl-C.'),
    ] = None,
    speed: Annotated[
        float, typer.Option("--speed", help="How much faster than the wall's the plant's time runs.")
    ] = 240.0,
    seed: Annotated[
        int | None,
        typer.Option("--seed", help="Of the simulated plant's random numbers; by default the story's own."),
    ] = None,
    folder: Annotated[
        Path | None,
        typer.Option(
            "--folder", help="Where model, site file and records go; by default a temporary folder."
        ),
    ] = None,
) -> None:
    """Show the whole job on this machine: a simulated plant behind a real OPC UA server, and everything it takes.

    Live estimates of a concentration without an instrument, a swing of the feed, a drifting thermometer that is
    found and named, late laboratory results and a mis-timed one, records with an audit trail, the web page.
    """
    seconds = _seconds(duration)
    if not 0.0 < speed <= 1000.0:
        raise DemoError(f"--speed: {speed:g}; expected a number above 0 and up to 1000")
    where = Path(tempfile.mkdtemp(prefix="softsensor-demo-")) if folder is None else folder
    where.mkdir(parents=True, exist_ok=True)
    if (where / "records.db").exists():
        raise DemoError(f"--folder: {where} holds records of an earlier run; expected an empty folder")
    asyncio.run(_demo(where, seconds, speed, seed))


def _seconds(duration: str | None) -> float | None:
    if duration is None:
        return None
    try:
        seconds = parse_duration(duration)
    except UnitError as error:
        raise DemoError(*(f"--duration: {line}" for line in error.lines)) from None
    if seconds < 60.0:
        raise DemoError(f"--duration: {duration!r}; expected at least one minute")
    return seconds


def _prepare(where: Path) -> PlantModel:
    """The model file and an upgraded database in the folder; the compiled loop warmed up."""
    from plant_models.simulators import reactor_model_path
    from softsensor.demonstration.report import warm_up
    from softsensor.records.upgrade import upgrade_database
    from softsensor.unit_design import load_model

    shutil.copyfile(reactor_model_path(), where / "r210.toml")
    model = load_model(where / "r210.toml")
    upgrade_database(f"sqlite:///{(where / 'records.db').as_posix()}")
    typer.echo("preparing (the first time on a machine this compiles for about half a minute)")
    warm_up(model)
    return model


def _free_port() -> int:
    """A port that nobody has; the system does not hand it out again soon."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


async def _demo(where: Path, seconds: float | None, speed: float, seed: int | None) -> None:
    from connectors.opcua.tag_server import TagServer
    from plant_models.simulators.scenario import DemoScenario
    from softsensor.demonstration.plant_side import (
        NAMESPACE,
        SimulatedPlant,
        Truth,
        demo_tank,
        served_tags,
    )

    story = DemoScenario() if seed is None else DemoScenario(seed=seed)
    model = _prepare(where)
    step = round(model.spec.sample_time * 1e6)
    start = time.time_ns() // 1000 // step * step
    until = None if seconds is None else start + round(seconds * 1e6) // step * step
    plant = SimulatedPlant(demo_tank(story, start), speed, until, Truth())
    async with TagServer(f"opc.tcp://127.0.0.1:{_free_port()}", NAMESPACE, served_tags(model)) as server:
        await plant.begin(server)
        restarts = await _play(where, model, server, plant)
    _report(where, (model, story), plant, restarts)


async def _play(where: Path, model: PlantModel, server: TagServer, plant: SimulatedPlant) -> int:
    """Start the service, then the plant's time; wait for the end; returns how often the service was started again."""
    from softsensor.demonstration.service_side import ServiceProcess, site_text

    ports = (_free_port(), _free_port())
    site_file = where / "site.toml"
    site_file.write_text(site_text(model, where / "r210.toml", server, plant.speed, ports), encoding="utf-8")
    typer.echo(f"folder: {where}")
    service = ServiceProcess(site_file, typer.echo)
    serving = asyncio.create_task(service.keep_running(), name="service")
    playing = asyncio.create_task(_play_plant(service, server, plant, ports[1]), name="plant")
    try:
        await asyncio.wait([serving, playing], return_when=asyncio.FIRST_COMPLETED)
        if serving.done():
            raise DemoError(f"the demonstration cannot go on: {serving.exception()}")
        playing.result()
    except asyncio.CancelledError:
        typer.echo("ending")
    finally:
        for task in (serving, playing):
            task.cancel()
        await asyncio.gather(serving, playing, return_exceptions=True)
        await service.stop()
    return service.restarts


async def _play_plant(service: ServiceProcess, server: TagServer, plant: SimulatedPlant, port: int) -> None:
    """Once the service is ready, let the plant's time run to its end and the service finish the last cycles."""
    await service.ready(port)
    running = asyncio.create_task(plant.run(server), name="plant's time")
    reached = asyncio.create_task(plant.reached.wait(), name="plant's end")
    try:
        await asyncio.wait([running, reached], return_when=asyncio.FIRST_COMPLETED)
        if running.done():
            running.result()
        await asyncio.sleep(CATCH_UP)
    finally:
        for task in (running, reached):
            task.cancel()
        await asyncio.gather(running, reached, return_exceptions=True)


def _report(where: Path, told: tuple[PlantModel, DemoScenario], plant: SimulatedPlant, restarts: int) -> None:
    from softsensor.demonstration.report import make_report, report_lines
    from softsensor.records.engine import open_database

    model, story = told
    url = f"sqlite:///{(where / 'records.db').as_posix()}"
    with open_database(url) as database:
        report = make_report(database, model, plant.truth, restarts)
    for line in report_lines(report, story, plant.tank.start):
        typer.echo(line)
    typer.echo(f"Records: {url}")
    typer.echo(
        f"The same again from the records: softsensor replay {where / 'r210.toml'} {url} --out results"
    )
    typer.echo("Advisory only: no safety function, no part of one, and no basis for defeating one.")
