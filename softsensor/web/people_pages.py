"""Pages and forms by which people put sensors back, leave them out, and let tests rest; the sheet for the workshop."""

from __future__ import annotations

from typing import Any
from urllib.parse import quote

from fastapi import APIRouter, Request
from fastapi.responses import HTMLResponse, RedirectResponse, Response

from plant_models.durations import parse_duration
from plant_models.errors import UnitError
from plant_models.specification import SensorSpec
from softsensor.records import changes, decisions
from softsensor.records.decisions import StoredDecision
from softsensor.records.reader import Unit, flags_of
from softsensor.records.rests import rests_at
from softsensor.records.tables import FINDINGS
from softsensor.web.flag_sheet import flag_sheet
from softsensor.web.forms import Field, calibration, check_errors, person
from softsensor.web.in_use import is_answerable, is_out, left_out_now, newest_us
from softsensor.web.pages import NOTHING_REFUSED, Pages, Refused
from softsensor.web.site import BadForm, ForeignForm, NotHere, Site


def waiting_for(site: Site, unit: Unit, tag: str | None) -> list[StoredDecision]:
    """Decisions about a sensor, or about the tests (None), that wait for the next cycle."""
    return [item for item in decisions.waiting_decisions(site.database, unit.id) if item.tag == tag]


def sensor_of(site: Site, unit: Unit, tag: str) -> SensorSpec:
    """The sensor of this tag.

    :raises NotHere: the model has none.
    """
    spec = site.models.spec(site.models.revision_of(unit))
    found = next((item for item in spec.sensors if item.tag == tag), None)
    if found is None:
        raise NotHere(f"There is no sensor {tag[:40]} in unit {unit.name}.")
    return found


def how_long(text: str) -> float:
    """A time limit in seconds.

    :raises BadForm: no duration, or one beyond the longest.
    """
    try:
        seconds = parse_duration(text)
    except UnitError:
        seconds = 0.0
    if not 0.0 < seconds <= changes.LONGEST_S:
        raise BadForm(
            f'the time is {text.strip()[:40]!r}; expected a time such as "90 min", "8 h" or "2 d", at most 30 d'
        )
    return seconds


def put_back_answer(
    site: Site, pages: Pages, request: Request, place: tuple[str, str], refused: Refused = NOTHING_REFUSED
) -> Response:
    """The page that puts a flag's sensor back; ``place``: the unit's name and the flag's id."""
    unit, flag, _ = site.flag(*place)
    units = {item.tag: item.unit for item in site.models.spec(site.models.revision_of(unit)).sensors}
    shown: dict[str, Any] = {
        "out": is_out(site, unit, flag),
        "answerable": is_answerable(site, unit, flag),
        "waiting": [item for item in waiting_for(site, unit, flag.tag) if item.act == "put back"],
        "units": units,
        "refused": refused,
    }
    return pages.page(request, "put_back.html", refused.status, unit=unit, flag=flag, **shown)


def sensor_answer(
    site: Site, pages: Pages, request: Request, place: tuple[str, str], refused: Refused = NOTHING_REFUSED
) -> Response:
    """A sensor's page; ``place``: the unit's name and the sensor's tag."""
    name, tag = place
    unit = site.unit(name)
    flags = [flag for flag in flags_of(site.database, unit.id) if flag.tag == tag and flag.size]
    shown: dict[str, Any] = {
        "sensor": sensor_of(site, unit, tag),
        "out": left_out_now(site, unit, tag),
        "before": decisions.left_out_of(site.database, unit.id, tag),
        "flag": next(iter(flags), None),
        "waiting": waiting_for(site, unit, tag),
        "refused": refused,
    }
    return pages.page(request, "sensor.html", refused.status, unit=unit, **shown)


def rests_answer(
    site: Site, pages: Pages, request: Request, name: str, refused: Refused = NOTHING_REFUSED
) -> Response:
    """The page of a unit's tests."""
    unit = site.unit(name)
    now = newest_us(site, unit)
    rest = None if now is None else decisions.rest_at(site.database, unit.id, now)
    others = [] if now is None else rests_at(site.database, unit.id, now)
    if rest is not None:
        others = [item for item in others if item.tag or item.cause != rest.occasion]
    shown: dict[str, Any] = {"rest": rest, "others": others, "waiting": waiting_for(site, unit, None)}
    shown |= {"refused": refused, "OCCASIONS": changes.OCCASIONS}
    return pages.page(request, "tests.html", refused.status, unit=unit, **shown)


def people_pages(site: Site, pages: Pages) -> APIRouter:
    """The addresses that people open about sensors and tests."""
    router = APIRouter(default_response_class=HTMLResponse)

    @router.get("/units/{name:path}/flag/sheet")
    def sheet(request: Request, name: str, id: str) -> Response:
        unit, flag, comments = site.flag(name, id)
        shown = flag_sheet(site, unit, flag)
        return pages.page(request, "flag_sheet.html", unit=unit, flag=flag, comments=comments, sheet=shown)

    @router.get("/units/{name:path}/flag/put-back")
    def put_back_page(request: Request, name: str, id: str) -> Response:
        return put_back_answer(site, pages, request, (name, id))

    @router.get("/units/{name:path}/sensor")
    def sensor_page(request: Request, name: str, tag: str) -> Response:
        return sensor_answer(site, pages, request, (name, tag))

    @router.get("/units/{name:path}/tests")
    def tests_page(request: Request, name: str) -> Response:
        return rests_answer(site, pages, request, name)

    return router


def people_forms(site: Site, pages: Pages) -> APIRouter:
    """The addresses that take the forms of these pages."""
    router = APIRouter(default_response_class=RedirectResponse)

    def ours(request: Request, token: str) -> None:
        refusal = site.guard.refusal(request, token)
        if refusal is not None:
            raise ForeignForm(refusal)

    def back(unit: str, page: str) -> RedirectResponse:
        return RedirectResponse(f"/units/{quote(unit, safe='')}/{page}", 303)

    @router.post("/units/{name:path}/flag/put-back")
    def put_back(
        request: Request,
        name: str,
        id: str,
        token: Field = "",
        finding: Field = "",
        actor: Field = "",
        reason: Field = "",
        as_found: Field = "",
        as_left: Field = "",
    ) -> Response:
        ours(request, token)
        unit, flag, _ = site.flag(name, id)
        try:
            if finding not in FINDINGS:
                raise BadForm(f"the finding is {finding[:40]!r}; expected one of: {', '.join(FINDINGS)}")
            who = person(actor, reason)
            found, left = calibration(as_found, "as found"), calibration(as_left, "as left")
            if finding == "confirmed" and (found is None or left is None):
                raise BadForm(
                    "a confirmed finding needs the errors as found and as left; expected two numbers"
                )
            check_errors(site, unit, flag.tag, found, left)
        except BadForm as problem:
            typed = {"finding": finding, "actor": actor, "reason": reason}
            typed |= {"as_found": as_found, "as_left": as_left}
            return put_back_answer(site, pages, request, (name, id), Refused(str(problem), typed, "put-back"))
        if not is_answerable(site, unit, flag):
            raise BadForm(
                f"{flag.tag} is in use and this flag is cleared; expected an open flag, or a sensor left out after one"
            )
        if any(item.act == "put back" for item in waiting_for(site, unit, flag.tag)):
            raise BadForm(f"a finding on {flag.tag} waits already; the next cycle takes it")
        changes.put_back(site.database, id, who.name, who.reason, found, left, finding)
        return back(name, f"flag?id={quote(id, safe='')}")

    @router.post("/units/{name:path}/sensor/leave-out")
    def leave_out(
        request: Request,
        name: str,
        tag: str,
        token: Field = "",
        time: Field = "",
        actor: Field = "",
        reason: Field = "",
    ) -> Response:
        ours(request, token)
        unit = site.unit(name)
        sensor_of(site, unit, tag)
        try:
            seconds, who = how_long(time), person(actor, reason)
        except BadForm as problem:
            typed = {"time": time, "actor": actor, "reason": reason}
            return sensor_answer(site, pages, request, (name, tag), Refused(str(problem), typed, "leave-out"))
        changes.leave_out(site.database, unit.id, tag, seconds, who.name, who.reason)
        return back(name, f"sensor?tag={quote(tag, safe='')}")

    @router.post("/units/{name:path}/sensor/put-back")
    def end_leaving_out(
        request: Request, name: str, tag: str, token: Field = "", actor: Field = "", reason: Field = ""
    ) -> Response:
        ours(request, token)
        unit = site.unit(name)
        sensor_of(site, unit, tag)
        try:
            who = person(actor, reason)
        except BadForm as problem:
            typed = {"actor": actor, "reason": reason}
            return sensor_answer(site, pages, request, (name, tag), Refused(str(problem), typed, "put-back"))
        if not any(item.by_person for item in left_out_now(site, unit, tag)):
            raise BadForm(f"{tag} is not left out by a person; there is nothing to end")
        changes.end_leaving_out(site.database, unit.id, tag, who.name, who.reason)
        return back(name, f"sensor?tag={quote(tag, safe='')}")

    @router.post("/units/{name:path}/tests/rest")
    def rest(
        request: Request,
        name: str,
        token: Field = "",
        occasion: Field = "",
        time: Field = "",
        actor: Field = "",
        reason: Field = "",
    ) -> Response:
        ours(request, token)
        unit = site.unit(name)
        try:
            if occasion not in changes.OCCASIONS:
                listed = ", ".join(changes.OCCASIONS)
                raise BadForm(f"the occasion is {occasion[:40]!r}; expected one of: {listed}")
            seconds, who = how_long(time), person(actor, reason)
        except BadForm as problem:
            typed = {"occasion": occasion, "time": time, "actor": actor, "reason": reason}
            return rests_answer(site, pages, request, name, Refused(str(problem), typed, "rest"))
        changes.rest_tests(site.database, unit.id, occasion, seconds, who.name, who.reason)
        return back(name, "tests")

    @router.post("/units/{name:path}/tests/go-on")
    def go_on(
        request: Request, name: str, token: Field = "", actor: Field = "", reason: Field = ""
    ) -> Response:
        ours(request, token)
        unit = site.unit(name)
        try:
            who = person(actor, reason)
        except BadForm as problem:
            typed = {"actor": actor, "reason": reason}
            return rests_answer(site, pages, request, name, Refused(str(problem), typed, "go-on"))
        now = newest_us(site, unit)
        if now is None or decisions.rest_at(site.database, unit.id, now) is None:
            raise BadForm("the tests are not at rest; there is nothing to end")
        changes.end_rest(site.database, unit.id, who.name, who.reason)
        return back(name, "tests")

    return router
