"""The web page as an application: routes, static files, and errors as pages in words."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

import bokeh
from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import Response
from fastapi.staticfiles import StaticFiles
from starlette.exceptions import HTTPException

from plant_models.errors import Problem
from softsensor.records.engine import Database
from softsensor.service.live_feed import LiveFeed
from softsensor.web.forms import form_routes
from softsensor.web.live import LiveStreams
from softsensor.web.model_pages import model_pages
from softsensor.web.models_in_service import ModelsInService
from softsensor.web.pages import Pages, data_routes, page_routes
from softsensor.web.people_pages import people_forms, people_pages
from softsensor.web.promise_page import promise_pages
from softsensor.web.review_pages import review_pages
from softsensor.web.security import HEADERS, ProtectiveHeaders
from softsensor.web.site import BadForm, ForeignForm, NotHere, Site

TITLES = {
    400: "This was not understood",
    403: "Not from this page",
    404: "Not here",
    405: "Not this way",
    500: "Something in the program is wrong",
    503: "Not possible at the moment",
}


def create_app(database: Database, feed: LiveFeed, clock_speed: float = 1.0) -> FastAPI:
    """The page over these records and this feed. Serve it on the loop on which the feed is published to.

    It needs no start-up of its own. Before the server shuts down, ``app.state.streams.close()`` on its loop ends the
    live streams, which would go on as long as a page is open. What reads the records runs in the server's thread pool.
    """
    streams = LiveStreams(feed)
    site = Site(database, streams, ModelsInService(database), clock_speed)
    pages = Pages(site)
    app = FastAPI(title="softsensor", docs_url=None, redoc_url=None, openapi_url=None)
    app.state.streams = streams
    app.add_middleware(ProtectiveHeaders)
    app.include_router(data_routes(site))
    app.include_router(model_pages(site, pages))
    app.include_router(promise_pages(site, pages))
    app.include_router(review_pages(site, pages))
    app.include_router(people_pages(site, pages))
    app.include_router(people_forms(site, pages))
    app.include_router(page_routes(site, pages))
    app.include_router(form_routes(site, pages))
    app.mount("/static/bokeh", StaticFiles(directory=bokeh_scripts()))
    app.mount("/static", StaticFiles(directory=str(resources.files("softsensor.web") / "static")))
    _explain_errors(app, pages)
    return app


def bokeh_scripts() -> Path:
    """Where the installed Bokeh keeps its scripts."""
    return Path(bokeh.__file__).parent / "server" / "static" / "js"


def _explain_errors(app: FastAPI, pages: Pages) -> None:
    def told(request: Request, status: int, *lines: str) -> Response:
        title = TITLES.get(status, "This cannot be done")
        return pages.page(request, "error.html", status, title=title, lines=lines)

    @app.exception_handler(Problem)
    def problem(request: Request, error: Problem) -> Response:
        kinds = ((NotHere, 404), (BadForm, 400), (ForeignForm, 403))
        status = next((status for kind, status in kinds if isinstance(error, kind)), 503)
        return told(request, status, *error.lines)

    @app.exception_handler(RequestValidationError)
    def invalid(request: Request, error: RequestValidationError) -> Response:
        lines = [
            f"{'.'.join(str(part) for part in fault['loc'][1:])}: {fault['msg']}" for fault in error.errors()
        ]
        return told(request, 400, *lines)

    @app.exception_handler(HTTPException)
    def refused(request: Request, error: HTTPException) -> Response:
        if error.status_code == 404:
            return told(request, 404, f"There is no page {request.url.path}.")
        return told(request, error.status_code, str(error.detail))

    @app.exception_handler(Exception)
    def fault(request: Request, error: Exception) -> Response:
        line = "The page could not be made. The program's own log has the details; the estimator runs on."
        answer = told(request, 500, line)
        answer.headers.update(HEADERS)  # this one answer is made outside the middleware
        return answer
