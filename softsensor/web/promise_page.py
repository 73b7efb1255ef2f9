"""Promised beside achieved: how often each sensor's flags were false, and over how long."""

from __future__ import annotations

from typing import Any

from fastapi import APIRouter, Request
from fastapi.responses import HTMLResponse, Response

from plant_models.number_text import plain
from softsensor.records.false_flags import achieved
from softsensor.records.reader import revisions_of
from softsensor.web.pages import Pages
from softsensor.web.site import Site


def interval_words(seconds: float | None) -> str:
    """A time between flags in days or hours; a word where there is no bound.

    >>> interval_words(259200.0), interval_words(5400.0), interval_words(None)
    ('3 d', '1.5 h', 'no bound')
    """
    if seconds is None:
        return "no bound"
    return f"{plain(seconds / 86400.0, 3)} d" if seconds >= 86400.0 else f"{plain(seconds / 3600.0, 3)} h"


def promise_pages(site: Site, pages: Pages) -> APIRouter:
    """The address of the page."""
    router = APIRouter(default_response_class=HTMLResponse)

    @router.get("/units/{name:path}/promise")
    def promise(request: Request, name: str) -> Response:
        unit = site.unit(name)
        spec = site.models.spec(site.models.revision_of(unit))
        known = {}
        for revision in revisions_of(site.database, unit.id):
            own = site.models.spec(revision.id)
            known[revision.id] = (own.sample_time, frozenset(tag for tag, _ in own.disarmed))
        rows = achieved(site.database, unit.id, [item.tag for item in spec.sensors], known)
        shown: dict[str, Any] = {
            "rows": rows,
            "promised": spec.false_flag_interval,
            "spec": spec,
            "words": interval_words,
        }
        return pages.page(request, "promise.html", unit=unit, **shown)

    return router
