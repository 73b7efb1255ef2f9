"""The page about a unit's model: the same tables as the command's, worked out once."""

from __future__ import annotations

import doctest
import html
import re
from importlib import import_module
from typing import Any

import pytest
from browser.recorded_unit import UNIT

from softsensor.records.engine import Database
from softsensor.service.report_tables import knowledge_tables, paths_table
from softsensor.service.sheet_tables import sheet_tables
from softsensor.web.models_in_service import ModelsInService

MODEL = f"/units/{UNIT}/model"


def words_of(page: str) -> str:
    """A page's text as read: tags out, blanks joined."""
    return " ".join(html.unescape(re.sub(r"<[^>]+>", " ", page)).split())


def test_every_table_of_the_command_is_on_the_page(recorded: Database, asker: Any) -> None:
    answer = asker.get(MODEL)
    assert answer.status_code == 200
    said = words_of(answer.text)
    models = ModelsInService(recorded)
    report = models.report(1)
    assert models.report(1) is report
    for table in (paths_table(report), *knowledge_tables(report), *sheet_tables(report)):
        assert table.title in said
        for row in table.rows:
            assert " ".join(" ".join(row).split()) in said
        for note in table.notes:
            assert note in said
    assert "Advisory only: estimates and flags are no safety function" in said
    for line in report.warnings:
        assert line in said


def test_the_units_page_leads_there_and_the_page_to_the_handbook(asker: Any) -> None:
    assert f'href="{MODEL}"' in asker.get(f"/units/{UNIT}").text
    page = asker.get(MODEL).text
    assert f'href="/units/{UNIT}"' in page
    assert asker.get("/handbook/09-detectability").status_code == 200
    assert 'href="/handbook/09-detectability"' in page


def test_there_is_no_model_of_a_unit_that_is_not_there(asker: Any) -> None:
    answer = asker.get("/units/X-1/model")
    assert answer.status_code == 404
    assert "There is no unit X-1" in answer.text


@pytest.mark.parametrize(
    "module",
    [
        "softsensor.web.model_pages",
        "softsensor.service.report_tables",
        "softsensor.detection.first_passage",
        "softsensor.detection.detectability",
    ],
)
def test_examples_in_the_text_are_true(module: str) -> None:
    result = doctest.testmod(import_module(module))
    assert result.attempted > 0
    assert result.failed == 0
