"""The one place below the command line that knows concrete connectors: a site file becomes a running service."""

from __future__ import annotations

import asyncio
import contextlib
import socket
from collections.abc import AsyncIterator, Callable, Iterator
from contextlib import AsyncExitStack, asynccontextmanager
from dataclasses import dataclass

import uvicorn

from connectors.opcua.publisher import Publisher
from connectors.opcua.settings import OpcUaSettings
from connectors.opcua.source import OpcUaSource
from plant_models.building import build_plant_model
from plant_models.errors import Problem
from plant_models.model_file import read_model_file
from plant_models.plant_model import PlantModel
from softsensor.errors import SiteFileError
from softsensor.opcua_sink import OpcUaSink, flag_action, published_units
from softsensor.records.claims import claimed
from softsensor.records.engine import Database, open_database
from softsensor.records.errors import DatabaseAwayError
from softsensor.records.named_arrays import pack_arrays
from softsensor.records.plant import Deed, Revision, register_revision, register_unit, set_revision_state
from softsensor.records.presence import Presence
from softsensor.records.writer import RecordsWriter
from softsensor.service.clock import Clock, FollowingClock
from softsensor.service.live import GRACE, LiveService
from softsensor.service.site_file import SiteSettings, UnitSettings
from softsensor.service.state_tables import fitted_states
from softsensor.service.steady_clock import SteadyClock
from softsensor.service.unit_service import UnitIdentity, UnitService
from softsensor.unit_design import design_unit
from softsensor.web.app import create_app

PROGRAM = "softsensor"
SIMULATED_GRACE = 10.0
"""As GRACE, for a simulated plant on a faster clock: what comes late there comes late for want of a processor."""
RENEW_EVERY = 2.0
"""Seconds between two looks at whether our lock has outlived the database's server."""
WRITER_PATIENCE = 1.0
"""Seconds that a full queue of records holds a unit up before the service ends and says why."""


@dataclass(frozen=True)
class Site:
    """A site that is up: its service, the page's address where there is one, its units' models."""

    service: LiveService
    page: str | None
    database: Database
    models: tuple[PlantModel, ...]


def site_clock(settings: SiteSettings) -> Clock:
    """The wall's clock, or the one that the site file describes."""
    if settings.clock is None:
        return SteadyClock()
    return FollowingClock(settings.clock.speed)


def read_models(settings: SiteSettings) -> list[PlantModel]:
    """Every unit's model, with its tags compared with the site's nodes.

    :raises Problem: all faults of all files.
    """
    models: list[PlantModel] = []
    lines: list[str] = []
    for unit in settings.units:
        try:
            model = build_plant_model(read_model_file(unit.model))
        except Problem as problem:
            lines += problem.lines
            continue
        lines += _node_faults(settings, unit, model)
        try:
            fitted_states(unit.states, model.spec, unit.nodes, str(settings.path))
        except SiteFileError as problem:
            lines += problem.lines
        models.append(model)
    names = [model.spec.name for model in models]
    lines += [
        f"{settings.path}: unit {name} appears twice" for name in {n for n in names if names.count(n) > 1}
    ]
    if lines:
        raise SiteFileError(*lines)
    return models


def _node_faults(settings: SiteSettings, unit: UnitSettings, model: PlantModel) -> Iterator[str]:
    needed = {*model.input_tags, *model.sensor_tags}
    labs = {item.lab.tag for item in model.spec.estimates if item.lab is not None}
    for tag in sorted(needed - set(unit.nodes)):
        yield f"{settings.path}: nodes: {tag} of {unit.model.name} has none; expected a node id for it"
    asked = {rule.tag for rule in unit.states}
    for tag in sorted(set(unit.nodes) - needed - labs - asked):
        what = f"no input, sensor or laboratory tag of {unit.model.name}, and no state asks for it"
        yield f"{settings.path}: nodes: {tag} is {what}"


def _source(
    settings: SiteSettings, models: list[PlantModel]
) -> tuple[OpcUaSource, dict[str, tuple[str, str]]]:
    plant = settings.plant
    opcua = OpcUaSettings(
        plant.endpoint,
        "Basic256Sha256" if plant.security_policy == "Basic256Sha256" else "None",
        plant.user,
        plant.password,
        plant.pki,
        plant.allow_unencrypted,
        plant.publishing_interval,
        0.0 if settings.clock is not None else None,
    )
    nodes, routes = {}, {}
    for unit, model in zip(settings.units, models, strict=True):
        for tag, node in unit.nodes.items():
            key = f"{model.spec.name} {tag}"
            nodes[key] = node
            routes[key] = (model.spec.name, tag)
    return OpcUaSource(opcua, nodes), routes


def unit_number(database: Database, model: PlantModel, clock: Clock) -> int:
    """The unit's place in the records; it is put there if it is new."""
    with database.write() as connection:
        return register_unit(connection, model.spec.name, model.spec.title, clock.now())


def register(database: Database, unit_id: int, model: PlantModel, clock: Clock, holder: str) -> UnitIdentity:
    """This revision of the unit's model on record and in service, audited."""
    spec, now = model.spec, clock.now()
    part = model.stochastic
    arrays = {"A": part.A, "q": part.q, "C": part.C, "P0": part.P0}
    for number, path in enumerate(model.paths):
        arrays |= {f"path{number}.phi": path.phi, f"path{number}.gamma_recent": path.gamma_recent}
        arrays |= {f"path{number}.gamma_older": path.gamma_older, f"path{number}.c": path.c}
    deed = Deed(PROGRAM, "started with this model file", now)
    with database.write() as connection:
        revision = Revision(model.digest, spec.source_text, pack_arrays(arrays))
        revision_id = register_revision(connection, unit_id, revision, deed)
        set_revision_state(connection, revision_id, "in service", deed)
    return UnitIdentity(unit_id, revision_id, holder)


@asynccontextmanager
async def _holder_of(database: Database, unit_ids: list[int]) -> AsyncIterator[str]:
    """Claim the units, and keep the claim alive until the block ends; gives our name in it."""

    async def keep(presence: Presence) -> None:
        while True:
            await asyncio.sleep(RENEW_EVERY)
            with contextlib.suppress(DatabaseAwayError):  # the service says so, and this asks again
                await asyncio.to_thread(presence.renew)

    with claimed(database, unit_ids) as presence:
        keeping = asyncio.create_task(keep(presence), name="claim")
        try:
            yield presence.key
        finally:
            keeping.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await keeping


class _PageServer(uvicorn.Server):
    """The web server on our own loop: signals stay with the program."""

    @contextlib.contextmanager
    def capture_signals(self) -> Iterator[None]:
        yield


@contextlib.contextmanager
def _had(address: tuple[str, int]) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        raise SiteFileError(
            f"web: address {address[0]}:{address[1]} cannot be had: {error.strerror or error}"
        ) from None


@contextlib.contextmanager
def _page_socket(address: tuple[str, int] | None) -> Iterator[socket.socket | None]:
    """The page's address, ours but not answering yet.

    :raises SiteFileError: somebody else has it, or this machine has no such address.
    """
    if address is None:
        yield None
        return
    family = socket.AF_INET6 if ":" in address[0] else socket.AF_INET
    with socket.socket(family, socket.SOCK_STREAM) as bound:
        # on Windows SO_REUSEADDR would let two programs have one port
        option = getattr(socket, "SO_EXCLUSIVEADDRUSE", socket.SO_REUSEADDR)
        bound.setsockopt(socket.SOL_SOCKET, option, 1)
        with _had(address):
            bound.bind(address)
        yield bound


@asynccontextmanager
async def _page(
    database: Database, service: LiveService, listener: socket.socket | None, speed: float
) -> AsyncIterator[str | None]:
    if listener is None:
        yield None
        return
    host, port = listener.getsockname()[:2]
    with _had((host, port)):
        listener.listen()
    app = create_app(database, service.feed, speed)
    config = uvicorn.Config(
        app, log_level="warning", access_log=False, lifespan="off", timeout_graceful_shutdown=1
    )
    server = _PageServer(config)
    task = asyncio.create_task(server.serve(sockets=[listener]), name="web page")
    try:
        yield f"http://{f'[{host}]' if ':' in host else host}:{port}"
    finally:
        app.state.streams.close()
        server.should_exit = True
        await task


@asynccontextmanager
async def running_site(settings: SiteSettings, tell: Callable[[str], None]) -> AsyncIterator[Site]:
    """Everything of a site up and checked; the caller then awaits ``site.service.serve()``.

    What can be refused at once is looked at before anything is compiled.

    :param tell: takes a line about what takes long.
    :raises Problem: whatever keeps the site from starting, in lines.
    """
    models = read_models(settings)
    clock = site_clock(settings)
    async with AsyncExitStack() as stack:
        listener = stack.enter_context(_page_socket(settings.web))
        database = stack.enter_context(open_database(settings.database, clock.now))
        numbers = [unit_number(database, model, clock) for model in models]
        holder = await stack.enter_async_context(_holder_of(database, numbers))
        source, routes = _source(settings, models)
        await source.probe()
        tell("preparing (the first time on a machine this compiles for about half a minute)")
        designs = [await asyncio.to_thread(design_unit, model) for model in models]
        identities = [
            register(database, number, model, clock, holder)
            for number, model in zip(numbers, models, strict=True)
        ]
        writer = stack.enter_context(RecordsWriter(database, patience=WRITER_PATIENCE))
        units = [
            UnitService(
                design,
                identity,
                database,
                writer,
                fitted_states(unit.states, design.model.spec, unit.nodes, str(settings.path)),
            )
            for design, identity, unit in zip(designs, identities, settings.units, strict=True)
        ]
        sinks = []
        if settings.publish is not None:
            server = Publisher(
                settings.publish, published_units(models), on_flag_action=flag_action(database)
            )
            publisher = await stack.enter_async_context(server)
            sinks.append(OpcUaSink(publisher))
        await stack.enter_async_context(source)
        grace = GRACE if settings.clock is None else SIMULATED_GRACE
        service = LiveService(units, source, routes, clock, writer, sinks, grace)
        speed = 1.0 if settings.clock is None else settings.clock.speed
        page = await stack.enter_async_context(_page(database, service, listener, speed))
        yield Site(service, page, database, tuple(models))
