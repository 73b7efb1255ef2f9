"""A real browser against a real server: Debian's chromium, headless, and the page served on a thread of its own."""

from __future__ import annotations

import asyncio
import os
import socket
import threading
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from urllib.parse import urlsplit

import pytest
import uvicorn
from browser.recorded_unit import recorded_unit
from fastapi import FastAPI
from playwright.sync_api import Browser, Page, Route, sync_playwright

from softsensor.records.engine import Database
from softsensor.service.live_feed import LiveFeed, News
from softsensor.web.app import create_app

CHROMIUM = Path("/usr/bin/chromium")
LOOPBACK = ("127.0.0.1", "localhost", "::1")


@pytest.fixture(scope="module")
def chromium() -> Iterator[Browser]:
    """The browser; without one the tests are skipped with the reason, or fail where CI=true.

    For one module only: while it is up, its event loop keeps other tests from running theirs.
    """
    if not CHROMIUM.exists():
        reason = f"no browser: {CHROMIUM} is not there (Debian: apt install chromium)"
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)
    with sync_playwright() as playwright:
        arguments = ["--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage"]
        browser = playwright.chromium.launch(executable_path=str(CHROMIUM), args=arguments)
        yield browser
        browser.close()


@dataclass
class Served:
    """A page that is up: its address, its records, and a way to publish news on the server's own loop."""

    address: str
    database: Database
    feed: LiveFeed
    loop: asyncio.AbstractEventLoop
    server: uvicorn.Server
    app: FastAPI

    thread: threading.Thread

    def stop(self) -> None:
        """End the live streams and the server, as the service does when it ends; once is enough."""
        if self.thread.is_alive():
            self.loop.call_soon_threadsafe(self.app.state.streams.close)
            self.server.should_exit = True
            self.thread.join(20.0)
        assert not self.thread.is_alive()

    def publish(self, news: News) -> None:
        """Publish as the service does: on the loop's thread."""

        async def tell() -> None:
            self.feed.publish(news)

        asyncio.run_coroutine_threadsafe(tell(), self.loop).result(10.0)


class AnnouncingServer(uvicorn.Server):
    """A server that tells when it is up."""

    def __init__(self, config: uvicorn.Config) -> None:
        super().__init__(config)
        self.up = threading.Event()

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        await super().startup(sockets)
        self.up.set()


@contextmanager
def served(database: Database, host: str = "127.0.0.1") -> Iterator[Served]:
    """Serve the page on a free port until the block ends."""
    feed = LiveFeed()
    app = create_app(database, feed)
    config = uvicorn.Config(app, log_level="critical", lifespan="off", timeout_graceful_shutdown=1)
    server, loop = AnnouncingServer(config), asyncio.new_event_loop()
    with closing(socket.socket()) as listener:
        listener.bind((host, 0))

        def run() -> None:
            loop.run_until_complete(server.serve(sockets=[listener]))

        thread = threading.Thread(target=run, name="page server")
        thread.start()
        assert server.up.wait(20.0)
        up = Served(f"http://{host}:{listener.getsockname()[1]}", database, feed, loop, server, app, thread)
        try:
            yield up
        finally:
            up.stop()
            loop.close()


@pytest.fixture
def site(tmp_path: Path) -> Iterator[Served]:
    """The recorded reactor's page, served."""
    with recorded_unit(tmp_path) as database, served(database) as up:
        yield up


@dataclass
class Watched:
    """A browser page and everything about it that should not be."""

    page: Page
    outside: list[str] = field(default_factory=list)
    complaints: list[str] = field(default_factory=list)

    def assert_quiet(self) -> None:
        """No request left the machine, no error reached the console."""
        assert self.outside == []
        assert self.complaints == []


@contextmanager
def watched_page(browser: Browser, width: int = 1280, height: int = 800) -> Iterator[Watched]:
    """A new page of a browser; requests to anywhere but this machine are stopped and noted."""
    context = browser.new_context(viewport={"width": width, "height": height}, timezone_id="Europe/Berlin")
    page = context.new_page()
    watched = Watched(page)

    def route(route: Route) -> None:
        url = urlsplit(route.request.url)
        if url.scheme in ("data", "blob") or url.hostname in LOOPBACK:
            route.continue_()
        else:
            watched.outside.append(route.request.url)
            route.abort()

    context.route("**/*", route)
    page.on(
        "console", lambda m: watched.complaints.append(m.text) if m.type in ("error", "warning") else None
    )
    page.on("pageerror", lambda error: watched.complaints.append(str(error)))
    try:
        yield watched
    finally:
        context.close()


@pytest.fixture
def browser_page(chromium: Browser) -> Iterator[Watched]:
    """A watched page at the size of a small control-room screen."""
    with watched_page(chromium) as watched:
        yield watched
