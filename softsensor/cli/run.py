"""``softsensor run``: the service."""

from __future__ import annotations

import asyncio
import contextlib
import os
import signal
import sys
import threading
from pathlib import Path
from typing import Annotated

import typer


def run(
    site: Annotated[Path, typer.Argument(help="The site file (TOML).")],
    until_input_ends: Annotated[
        bool,
        typer.Option(
            "--until-input-ends", help="End when standard input ends; for a program that starts this one."
        ),
    ] = False,
) -> None:
    """Serve a site: OPC UA in, estimates and flags out, records, web page. Ends on Ctrl-C."""
    from softsensor.service.site_file import read_site_file

    settings = read_site_file(site)
    asyncio.run(_serve(settings, until_input_ends))


async def _serve(settings: object, until_input_ends: bool) -> None:
    from softsensor.cli.console import tell_news, units_of
    from softsensor.composition import running_site
    from softsensor.service.site_file import SiteSettings

    assert isinstance(settings, SiteSettings)
    stop = asyncio.Event()
    _stop_on_signals(stop)
    if until_input_ends:
        _stop_on_end_of_input(stop)
    async with running_site(settings, typer.echo) as site:
        if site.page is not None:
            typer.echo(f"page: {site.page}")
        typer.echo("running; Ctrl-C ends it. Advisory only: nothing is written to the control system.")
        serving = asyncio.create_task(site.service.serve(), name="service")
        telling = asyncio.create_task(tell_news(site.service.feed, units_of(site.models)), name="console")
        stopping = asyncio.create_task(stop.wait(), name="stop")
        await asyncio.wait([serving, stopping], return_when=asyncio.FIRST_COMPLETED)
        for task in (telling, stopping):
            task.cancel()
        site.service.stop()
        try:
            await serving
        except* Exception as group:
            raise _first(group) from None


def _first(group: BaseExceptionGroup[BaseException]) -> BaseException:
    error: BaseException = group
    while isinstance(error, BaseExceptionGroup):
        error = error.exceptions[0]
    return error


def _stop_on_end_of_input(stop: asyncio.Event) -> None:
    """Standard input ends when the program that holds its other end does, however it ends.

    A thread of its own waits for that: Windows cannot wait for a pipe on the loop. It reads past ``sys.stdin``,
    whose lock a thread must not hold when the interpreter ends.
    """
    loop = asyncio.get_running_loop()

    def wait() -> None:
        with contextlib.suppress(OSError, ValueError):  # input that cannot be read has ended
            while sys.stdin is not None and os.read(sys.stdin.fileno(), 4096):
                pass
        with contextlib.suppress(RuntimeError):  # the loop has ended before the input
            loop.call_soon_threadsafe(stop.set)

    threading.Thread(target=wait, name="standard input", daemon=True).start()


def _stop_on_signals(stop: asyncio.Event) -> None:
    """Ctrl-C, Ctrl-Break and a polite kill end the service in order; Windows has no signal handlers on the loop."""
    loop = asyncio.get_running_loop()
    numbers = [signal.SIGINT, signal.SIGTERM]
    if hasattr(signal, "SIGBREAK"):
        numbers.append(signal.SIGBREAK)
    for number in numbers:
        try:
            loop.add_signal_handler(number, stop.set)
        except NotImplementedError:
            signal.signal(number, lambda *_: loop.call_soon_threadsafe(stop.set))
