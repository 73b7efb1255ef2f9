"""The address of the review: a past period of a unit, live and smoothed."""

from __future__ import annotations

import threading
from typing import Any

from fastapi import APIRouter, Request
from fastapi.responses import HTMLResponse, Response

from softsensor.web.in_use import newest_us
from softsensor.web.pages import Pages
from softsensor.web.review import review_of
from softsensor.web.review_period import USUAL, period_of, usual_periods
from softsensor.web.site import Site


def review_pages(site: Site, pages: Pages) -> APIRouter:
    """The page; one period is worked out at a time, so that many readers cannot slow the estimator down."""
    router = APIRouter(default_response_class=HTMLResponse)
    working = threading.Lock()

    @router.get("/units/{name:path}/review")
    def review(request: Request, name: str, until: str = "", hours: str = f"{USUAL:g}") -> Response:
        unit = site.unit(name)
        newest = newest_us(site, unit)
        last = site.database.clock() if newest is None else newest
        period = period_of(until, hours, last)
        with working:
            found = review_of(site, unit, period, last)
        periods = usual_periods(site.models.spec(site.models.revision_of(unit)))
        shown: dict[str, Any] = {"review": found, "period": period, "periods": periods}
        return pages.page(request, "review.html", unit=unit, **shown)

    return router
