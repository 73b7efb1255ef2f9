"""The page about a unit's model: what its estimates can know, which sensor faults are found, what would mend the rest."""

from __future__ import annotations

from typing import Any

from fastapi import APIRouter, Request
from fastapi.responses import HTMLResponse, Response

from softsensor.service.model_report import CAUTION, duration_text
from softsensor.service.report_tables import ReportTable, knowledge_tables, paths_table
from softsensor.service.sheet_tables import sheet_tables
from softsensor.web.pages import Pages
from softsensor.web.site import Site

FIGURES = "0123456789+-"
IN_WORDS = ("", "without limit", "none", "absorbed", "under 1 %", "never", "later")


def model_pages(site: Site, pages: Pages) -> APIRouter:
    """The address that people open; the report is worked out in the server's thread pool, once for each model."""
    router = APIRouter(default_response_class=HTMLResponse)

    @router.get("/units/{name:path}/model")
    def model_page(request: Request, name: str) -> Response:
        unit = site.unit(name)
        revision = site.models.revision_of(unit)
        report = site.models.report(revision)
        shown: dict[str, Any] = {
            "report": report,
            "revision": revision,
            "sample_time": duration_text(report.sampling.sample_time),
            "known": [_Shown(table) for table in (*knowledge_tables(report), paths_table(report))],
            "sheet": [_Shown(table) for table in sheet_tables(report)],
            "caution": CAUTION,
        }
        return pages.page(request, "model.html", unit=unit, **shown)

    return router


class _Shown:
    """A table with which of its columns hold figures, which stand on the right."""

    def __init__(self, table: ReportTable) -> None:
        self.title, self.notes = table.title, table.notes
        right = [
            place > 0 and all(_is_figure(row[place]) for row in table.rows)
            for place in range(len(table.columns))
        ]
        self.columns = tuple(zip(table.columns, right, strict=True))
        self.rows = tuple(tuple(zip(row, right, strict=True)) for row in table.rows)


def _is_figure(cell: str) -> bool:
    """
    >>> _is_figure("0.3 K"), _is_figure("TI2101A 0.3"), _is_figure("none")
    (True, False, True)
    """
    return cell in IN_WORDS or cell[:1] in FIGURES
