"""The pages over a recorded unit, asked without a network."""

from __future__ import annotations

import asyncio
import re
from collections.abc import Iterator
from pathlib import Path

import httpx
import pytest
from browser.recorded_unit import recorded_unit
from fastapi import FastAPI

from softsensor.records.engine import Database
from softsensor.service.live_feed import LiveFeed
from softsensor.web.app import create_app

ORIGIN = "http://plant.test"


class Asker:
    """A browser of sorts: keeps cookies, follows nothing, sends forms with their token as a page of ours would."""

    def __init__(self, app: FastAPI) -> None:
        self.app = app
        self.cookies = httpx.Cookies()

    def ask(self, method: str, address: str, **given: object) -> httpx.Response:
        """One request; errors inside the application become answers, as for a browser."""

        async def send() -> httpx.Response:
            transport = httpx.ASGITransport(self.app, raise_app_exceptions=False)
            async with httpx.AsyncClient(
                transport=transport, base_url=ORIGIN, cookies=self.cookies
            ) as client:
                answer = await client.request(method, address, **given)  # type: ignore[arg-type]
                self.cookies = client.cookies
                return answer

        return asyncio.run(send())

    def get(self, address: str) -> httpx.Response:
        """Open a page."""
        return self.ask("GET", address)

    def token(self, page: str) -> str:
        """The token in the forms of a page."""
        found = re.search(r'name="token" value="([0-9a-f]+)"', self.get(page).text)
        assert found is not None
        return found[1]

    def post(self, address: str, fields: dict[str, str], origin: str | None = ORIGIN) -> httpx.Response:
        """Send a form."""
        return self.ask("POST", address, data=fields, headers={} if origin is None else {"Origin": origin})


@pytest.fixture
def recorded(tmp_path: Path) -> Iterator[Database]:
    """A reactor on record."""
    with recorded_unit(tmp_path) as database:
        yield database


@pytest.fixture
def asker(recorded: Database) -> Asker:
    """Asks the pages of the recorded reactor."""
    return Asker(create_app(recorded, LiveFeed()))


@pytest.fixture
def make_asker() -> type[Asker]:
    """Makes one over another application."""
    return Asker
