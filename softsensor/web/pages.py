"""The pages that are read, and the small JSON interfaces beside them."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from dataclasses import dataclass
from importlib import resources
from typing import Annotated, Any
from urllib.parse import quote

from fastapi import APIRouter, Query, Request
from fastapi.responses import HTMLResponse, JSONResponse, RedirectResponse, Response, StreamingResponse
from jinja2 import Environment

from plant_models.errors import Problem
from softsensor.alarms.sensor_status import SensorStatus
from softsensor.records import audit, reader
from softsensor.records.reader import Unit
from softsensor.records.tables import FINDINGS
from softsensor.web import wording
from softsensor.web.chart import LOW, TALL, estimate_chart, sensor_chart
from softsensor.web.chart_data import (
    Columns,
    Window,
    estimate_columns,
    find_estimate,
    sensor_columns,
)
from softsensor.web.flag_seen import seen_of
from softsensor.web.handbook_text import chapter_html
from softsensor.web.in_use import is_answerable, is_out, newest_us
from softsensor.web.review_period import period_of_flag
from softsensor.web.rows import estimate_rows, latest_cycle, tag_decimals, tag_units
from softsensor.web.security import COOKIE
from softsensor.web.site import NotHere, Site, choices_for
from softsensor.web.templating import templates
from softsensor.web.unit_view import UnitView

PERIODS = {"1 h": 1.0, "8 h": 8.0, "24 h": 24.0, "7 d": 168.0}
USUAL_HOURS = 8.0
PARTS = ("state", "sensors", "flags", "laboratory", "events", "trail")
ENTRIES_PER_PAGE = 100
AHEAD = 0.02
"""Share of the window left empty for what comes next."""

Hours = Annotated[float, Query(gt=0.0, le=168.0)]
OffsetMinutes = Annotated[int, Query(ge=-1440, le=1440)]


def environment() -> Environment:
    """The templates with what the pages ask of them besides words."""
    found = templates()
    found.globals |= {"SensorStatus": SensorStatus, "FINDINGS": FINDINGS, "PERIODS": PERIODS}
    return found


@dataclass(frozen=True)
class Refused:
    """A form that was not taken: why, what was typed by field, and which form of its page it is."""

    complaint: str
    typed: dict[str, str]
    form: str

    def typed_in(self, form: str) -> dict[str, str]:
        """What to show in a form: what was typed there, so that nobody types it twice."""
        return self.typed if form == self.form else {}

    @property
    def status(self) -> int:
        """Of the answer that shows the page again."""
        return 400 if self.form else 200

    def complaint_about(self, form: str) -> str:
        """Why a form was not taken; empty for the others of its page."""
        return self.complaint if form == self.form else ""


NOTHING_REFUSED = Refused("", {}, "")


class Pages:
    """Turns templates into answers."""

    def __init__(self, site: Site) -> None:
        self._site = site
        self._templates = environment()

    def page(self, request: Request, template: str, status: int = 200, **values: Any) -> HTMLResponse:
        """A whole page, with the form token of this browser."""
        cookie = self._site.guard.cookie_of(request)
        values |= {"token": self._site.guard.token_for(cookie)}
        response = HTMLResponse(self._templates.get_template(template).render(values), status)
        if request.cookies.get(COOKIE) != cookie:
            secure = request.url.scheme == "https"
            response.set_cookie(COOKIE, cookie, httponly=True, samesite="strict", secure=secure)
        return response

    def part(self, template: str, **values: Any) -> HTMLResponse:
        """A piece of a page."""
        return HTMLResponse(self._templates.get_template(template).render(values))


def flag_answer(
    site: Site, pages: Pages, request: Request, place: tuple[str, str], refused: Refused = NOTHING_REFUSED
) -> Response:
    """A flag's page; ``place``: the unit's name and the flag's id."""
    unit, flag, comments = site.flag(*place)
    spec = site.models.spec(site.models.revision_of(unit))
    shown: dict[str, Any] = {
        "units": tag_units(spec),
        "decimals": tag_decimals(spec),
        "seen": seen_of(site, unit, flag),
        "out": is_out(site, unit, flag),
        "answerable": is_answerable(site, unit, flag),
        "refused": refused,
        "review": period_of_flag(flag, spec, newest_us(site, unit)).query,
    }
    return pages.page(request, "flag.html", refused.status, unit=unit, flag=flag, comments=comments, **shown)


def lab_answer(
    site: Site, pages: Pages, request: Request, place: tuple[str, int], refused: Refused = NOTHING_REFUSED
) -> Response:
    """A laboratory result's page; ``place``: the unit's name and the result's id."""
    unit, lab = site.lab(*place)
    spec = site.models.spec(site.models.revision_of(unit))
    shown: dict[str, Any] = {
        "units": tag_units(spec),
        "decimals": tag_decimals(spec),
        "choices": choices_for(lab, others := site.other_reports(lab)),
        "others": others,
        "refused": refused,
    }
    return pages.page(request, "lab.html", refused.status, unit=unit, lab=lab, **shown)


def page_routes(site: Site, pages: Pages) -> APIRouter:
    """The addresses that people open."""
    router = APIRouter(default_response_class=HTMLResponse)

    @router.get("/")
    def index(request: Request) -> Response:
        units = reader.all_units(site.database)
        if len(units) == 1:
            return RedirectResponse(f"/units/{quote(units[0].name, safe='')}", 307)
        return pages.page(request, "units.html", units=units)

    @router.get("/units/{name:path}/part/{part}")
    def part(name: str, part: str) -> Response:
        if part not in PARTS:
            raise NotHere(f"There is no part {part} of a unit's page. Parts: {', '.join(PARTS)}.")
        view = UnitView(site.database, site.models, site.unit(name), site.clock_speed)
        return pages.part(f"part_{part}.html", view=view)

    @router.get("/units/{name:path}/flag")
    def flag_page(request: Request, name: str, id: str) -> Response:
        return flag_answer(site, pages, request, (name, id))

    @router.get("/units/{name:path}/lab")
    def lab_page(request: Request, name: str, id: int) -> Response:
        return lab_answer(site, pages, request, (name, id))

    @router.get("/audit-trail")
    def trail(request: Request, before: Annotated[int | None, Query(ge=1)] = None) -> Response:
        entries = reader.latest_audit_entries(site.database, before, ENTRIES_PER_PAGE)
        report = audit.verify(site.database)
        return pages.page(request, "audit_trail.html", entries=entries, report=report, before=before)

    @router.get("/handbook")
    def handbook(request: Request) -> Response:
        return pages.page(request, "handbook.html", chapters=_chapters(), chapter=None, text="")

    @router.get("/handbook/pictures/{name}")
    def handbook_picture(name: str) -> Response:
        pictures = {
            file.name: file for file in resources.files("softsensor.handbook").joinpath("pictures").iterdir()
        }
        if name not in pictures or not name.endswith(".png"):
            raise NotHere(f"There is no picture {name}.")
        return Response(pictures[name].read_bytes(), media_type="image/png")

    @router.get("/handbook/{chapter}")
    def handbook_chapter(request: Request, chapter: str) -> Response:
        chapters = _chapters()
        if chapter not in chapters:
            raise NotHere(f"There is no chapter {chapter}. Chapters: {', '.join(chapters) or 'none'}.")
        shown: dict[str, Any] = {
            "chapters": chapters,
            "chapter": chapter,
            "text": chapter_html(chapters[chapter]),
        }
        return pages.page(request, "handbook.html", **shown)

    @router.get("/units/{name:path}")
    def unit_page(request: Request, name: str) -> Response:
        view = UnitView(site.database, site.models, site.unit(name), site.clock_speed)
        return pages.page(request, "unit.html", view=view, parts=PARTS)

    return router


def _chapters() -> dict[str, str]:
    """The handbook's chapters by name, as they are written."""
    files = resources.files("softsensor.handbook").iterdir()
    names = sorted((file for file in files if file.name.endswith(".md")), key=lambda file: file.name)
    return {file.name.removesuffix(".md"): file.read_text(encoding="utf-8") for file in names}


def data_routes(site: Site) -> APIRouter:
    """The addresses that the page's script and other programs ask."""
    router = APIRouter(default_response_class=JSONResponse)

    def window_of(unit: Unit, hours: float, offset: int) -> Window:
        latest = newest(unit)
        width = int(hours * 3.6e9)
        return Window(latest - width, latest + int(AHEAD * width), offset * 60_000_000)

    def newest(unit: Unit) -> int:
        latest, _ = latest_cycle(site.database, unit, site.models.revision_of(unit))
        return site.database.clock() if latest is None else int(latest.times[-1])

    @router.get("/units/{name:path}/estimates.json")
    def estimates(name: str) -> dict[str, Any]:
        unit = site.unit(name)
        revision = site.models.revision_of(unit)
        latest, _ = latest_cycle(site.database, unit, revision)
        keys = ("tag", "unit", "value", "sd", "lower", "upper", "status", "reason")
        rows = estimate_rows(site.models.spec(revision), latest)
        return {
            "unit": unit.name,
            "time": None if latest is None else wording.iso(int(latest.times[-1])),
            "cycle": None if latest is None else latest.results.first_cycle,
            "estimates": [{key: getattr(row, key) for key in keys} for row in rows],
        }

    def columns_of(unit: Unit, tag: str, window: Window) -> dict[str, Columns]:
        spec = site.models.spec(site.models.revision_of(unit))
        item = find_estimate(spec, tag)
        if item is not None:
            return estimate_columns(site.database, site.models, unit, item, window)
        if any(sensor.tag == tag for sensor in spec.sensors):
            return sensor_columns(site.database, site.models, unit, tag, window)
        raise NotHere(f"There is no estimate or sensor {tag} in unit {unit.name}.")

    @router.get("/units/{name:path}/chart.json")
    def chart(name: str, tag: str, hours: Hours = USUAL_HOURS, offset: OffsetMinutes = 0) -> dict[str, Any]:
        unit = site.unit(name)
        window = window_of(unit, hours, offset)
        columns = columns_of(unit, tag, window)
        revision = site.models.revision_of(unit)
        spec = site.models.spec(revision)
        item = find_estimate(spec, tag)
        if item is not None:
            height = TALL if len(spec.estimates) == 1 else LOW
            return {"window": window.ends(), "item": estimate_chart(item, window, columns, height)}
        i = [sensor.tag for sensor in spec.sensors].index(tag)
        return {"window": window.ends(), "item": sensor_chart(spec.sensors[i], window, columns)}

    @router.get("/units/{name:path}/chart-data.json")
    def chart_data(
        name: str, tag: str, hours: Hours = USUAL_HOURS, offset: OffsetMinutes = 0
    ) -> dict[str, Any]:
        unit = site.unit(name)
        window = window_of(unit, hours, offset)
        return {"window": window.ends(), "columns": columns_of(unit, tag, window)}

    @router.get("/units/{name:path}/live")
    async def live(name: str) -> StreamingResponse:
        await asyncio.to_thread(site.unit, name)
        stream: AsyncIterator[str] = site.streams.updates(name)
        return StreamingResponse(stream, media_type="text/event-stream")

    @router.get("/health")
    def health() -> JSONResponse:
        try:
            units = reader.all_units(site.database)
            cycles = {unit.name: _age(site, unit) for unit in units}
        except Problem as problem:
            return JSONResponse({"status": "the records cannot be read", "reason": str(problem)}, 503)
        return JSONResponse({"status": "up", "units": cycles})

    return router


def _age(site: Site, unit: Unit) -> dict[str, Any]:
    latest, _ = latest_cycle(site.database, unit, site.models.revision_of(unit))
    if latest is None:
        return {"newest_cycle": None, "age_s": None}
    newest = int(latest.times[-1])
    return {"newest_cycle": wording.iso(newest), "age_s": (site.database.clock() - newest) * 1e-6}
