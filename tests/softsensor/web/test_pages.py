"""What the pages show of what is on record, and what they say when something is not there."""

from __future__ import annotations

import doctest
import html
import re
from importlib import import_module
from pathlib import Path
from typing import Any

import pytest
from browser.recorded_unit import CYCLES, FLAG_ID, NOW, UNIT, course, recorded_unit
from sqlalchemy import text

from softsensor.records import happenings
from softsensor.records.engine import Database, open_database
from softsensor.records.happenings import Event, Flag
from softsensor.records.plant import register_unit
from softsensor.records.upgrade import upgrade_database
from softsensor.service.live_feed import LiveFeed
from softsensor.web.app import create_app


def words_of(page: str) -> str:
    """A page's text as read: tags out, blanks joined."""
    read = " ".join(html.unescape(re.sub(r"<[^>]+>", " ", page)).split())
    return re.sub(r" ([,.:;])", r"\1", read)


def test_the_only_unit_opens_at_once(asker: Any) -> None:
    answer = asker.get("/")
    assert (answer.status_code, answer.headers["location"]) == (307, "/units/R-210")


def test_several_units_are_listed_and_none_is_said(
    recorded: Database, asker: Any, tmp_path: Path, make_asker: Any
) -> None:
    with recorded.write() as connection:
        register_unit(connection, "C-410 <A>", "Column", NOW)
    page = asker.get("/").text
    assert "/units/R-210" in page
    assert 'href="/units/C-410%20%3CA%3E"' in page
    url = f"sqlite:///{(tmp_path / 'other.db').as_posix()}"
    upgrade_database(url)
    with open_database(url) as empty:
        assert "No unit is on record yet" in make_asker(create_app(empty, LiveFeed())).get("/").text


def test_the_unit_page_shows_the_newest_cycle_with_units(asker: Any) -> None:
    page = words_of(asker.get(f"/units/{UNIT}").text)
    made = course()
    value, half = float(made.estimate[-1, 0]), 1.959963984540054 * float(made.sd[-1, 0])
    assert f"{value:.3f} mol/L" in page
    assert f"95 % interval {value - half:.3f} to {value + half:.3f} mol/L Good" in page
    reading, predicted = float(made.readings.y[-1, 0]), float(made.predicted[-1, 0])
    deviations = float(made.innovation[-1, 0]) / 0.16
    row = f"TI2101A {reading:.2f} degC {predicted:.2f} degC {deviations:+.1f} sd not known normal in use"
    assert row in page
    assert f"TI2105 none {made.predicted[-1, 2]:.2f} degC none not known normal no reading: Bad" in page
    assert "S out of specification in use" in page
    assert "9 to 14 m3/h Good normal" in page
    assert "Advisory only." in page
    assert "Plant connection connected" in page


def test_the_unit_page_shows_flags_and_waiting_results(asker: Any) -> None:
    page = words_of(asker.get(f"/units/{UNIT}").text)
    assert "TI2101B drift not acknowledged" in page
    assert "+1.21 ± 0.07 K (sd)" in page
    assert "over 99 %, named alone" in page
    assert "TI2105 spike detected 2026-12-01 10:12:00 UTC, cleared 2026-12-01 10:20:00 UTC" in page
    assert "sampling time: fits the estimate 45 min earlier than stated" in page
    assert "-5.6 sd away" in page


def test_a_flag_that_is_not_isolated_names_its_group(recorded: Database, asker: Any) -> None:
    group = ("TI2101A", "TI2101B", "feed concentration")
    flag = Flag("g", "TI2101A", "stuck", NOW - 9, NOW, float("nan"), float("nan"), 0.93, group)
    with recorded.write() as connection:
        happenings.open_flag(connection, 1, flag)
    page = words_of(asker.get(f"/units/{UNIT}/part/flags").text)
    assert "no size" in page
    assert "93 %, cannot be told apart from TI2101B, feed concentration" in page
    assert "F failure" in words_of(asker.get(f"/units/{UNIT}/part/sensors").text)


def test_a_lost_connection_and_late_cycles_are_said(recorded: Database, asker: Any) -> None:
    event = happenings.Event(1, NOW, "connection", "disconnected: the server closed the session")
    with recorded.write() as connection:
        happenings.record_event(connection, event)
        happenings.record_event(connection, happenings.Event(1, NOW, "records", "waiting: the disk is full"))
        connection.execute(text("DELETE FROM results WHERE cycle > :last"), {"last": CYCLES - 100})
    state = words_of(asker.get(f"/units/{UNIT}/part/state").text)
    assert "disconnected (the server closed the session)" in state
    assert "Records ▲ waiting: the disk is full" in state
    assert "late: the newest cycle is 16.5 min old" in state


@pytest.mark.parametrize("hostile", ["<script>alert(1)</script>", "</title><img src=x onerror=alert(1)>"])
def test_text_from_outside_stays_text(tmp_path: Path, make_asker: Any, hostile: str) -> None:
    with recorded_unit(tmp_path, title=hostile) as database:
        flag = Flag(f"f {hostile}", hostile, "bias", NOW - 9, NOW, 1.0, 0.1, 0.5, (hostile, "a"))
        with database.write() as connection:
            happenings.open_flag(connection, 1, flag)
            happenings.record_event(connection, happenings.Event(1, NOW, hostile, hostile, tag=hostile))
        asker = make_asker(create_app(database, LiveFeed()))
        pages = [
            f"/units/{UNIT}",
            f"/units/{UNIT}/flag?id=f%20{hostile}",
            "/audit-trail",
            f"/units/{hostile}",
        ]
        for address in pages:
            page = asker.get(address).text
            assert hostile not in page
            assert html.escape(hostile) in page.replace("&#39;", "&#x27;").replace("&#34;", "&quot;")


NOT_HERE = {
    "/units/X-1": "There is no unit X-1. Units on record: R-210.",
    "/units/X-1/live": "There is no unit X-1.",
    "/units/X-1/estimates.json": "There is no unit X-1.",
    f"/units/{UNIT}/flag?id=gone": "There is no flag gone of unit R-210.",
    f"/units/{UNIT}/lab?id=99": "There is no laboratory result 99 of unit R-210.",
    f"/units/{UNIT}/part/secrets": "There is no part secrets",
    f"/units/{UNIT}/chart.json?tag=XI1": "There is no estimate or sensor XI1 in unit R-210.",
    f"/units/{UNIT}/chart-data.json?tag=XI1": "There is no estimate or sensor XI1 in unit R-210.",
    "/handbook/nothing": "There is no chapter nothing.",
    "/nowhere": "There is no page /nowhere.",
    "/static/nothing.js": "There is no page /static/nothing.js.",
    "/static/../app.py": "There is no page",
    "/docs": "There is no page /docs.",
    "/openapi.json": "There is no page /openapi.json.",
}


@pytest.mark.parametrize("address", NOT_HERE)
def test_what_is_not_there_is_said_in_words(asker: Any, address: str) -> None:
    answer = asker.get(address)
    assert answer.status_code == 404
    assert NOT_HERE[address] in words_of(answer.text)
    assert "Traceback" not in answer.text


@pytest.mark.parametrize(
    "address",
    [
        f"/units/{UNIT}/lab?id=first",
        f"/units/{UNIT}/flag",
        f"/units/{UNIT}/chart.json?tag=AY2101&hours=0",
        f"/units/{UNIT}/chart.json?tag=AY2101&hours=nan",
        f"/units/{UNIT}/chart.json?tag=AY2101&hours=1000",
        f"/units/{UNIT}/chart.json?tag=AY2101&offset=9999",
        "/audit-trail?before=0",
        "/audit-trail?before=newest",
    ],
)
def test_an_address_that_makes_no_sense_is_answered_with_what_was_wrong(asker: Any, address: str) -> None:
    answer = asker.get(address)
    assert answer.status_code == 400
    assert "This was not understood" in answer.text


def test_records_that_cannot_be_read_are_said_in_words(recorded: Database, asker: Any) -> None:
    assert asker.get("/health").json()["units"][UNIT]["age_s"] == 0.0
    with recorded.write() as connection:
        connection.execute(text("ALTER TABLE units RENAME TO gone"))
    for address in ("/", f"/units/{UNIT}", f"/units/{UNIT}/part/flags"):
        answer = asker.get(address)
        assert answer.status_code == 503
        assert "records.db refused the work" in words_of(answer.text)
    health = asker.get("/health")
    assert (health.status_code, health.json()["status"]) == (503, "the records cannot be read")


def test_a_unit_that_has_not_run_yet_says_so(tmp_path: Path, make_asker: Any) -> None:
    with recorded_unit(tmp_path) as database:
        with database.write() as connection:
            for table in ("revised_estimates", "results", "cycles"):
                connection.execute(text(f"DELETE FROM {table}"))
        asker = make_asker(create_app(database, LiveFeed()))
        assert "no cycle has run yet" in words_of(asker.get(f"/units/{UNIT}").text)
        assert asker.get(f"/units/{UNIT}/estimates.json").json()["time"] is None
        assert asker.get(f"/units/{UNIT}/chart-data.json?tag=AY2101").json()["columns"]["estimate"]["x"] == []
        assert asker.get(f"/units/{UNIT}/chart.json?tag=TI2101A").status_code == 200
        assert asker.get("/health").json()["units"][UNIT]["newest_cycle"] is None


def test_a_model_on_record_that_is_no_model_is_said_in_words(recorded: Database, asker: Any) -> None:
    with recorded.write() as connection:
        connection.execute(text("UPDATE model_revisions SET file_text = '[unit]'"))
    answer = asker.get(f"/units/{UNIT}")
    assert answer.status_code == 503
    assert "sample_time: missing" in words_of(answer.text)


def test_a_fault_of_ours_is_no_traceback(recorded: Database, asker: Any) -> None:
    with recorded.write() as connection:
        connection.execute(text("UPDATE results SET reasons = '{'"))
    answer = asker.get(f"/units/{UNIT}")
    assert answer.status_code == 500
    assert "The page could not be made." in answer.text
    assert "Traceback" not in answer.text
    assert "script-src 'self'" in answer.headers["content-security-policy"]


def test_a_unit_s_name_may_hold_any_sign(recorded: Database, asker: Any) -> None:
    name = "area 2/R?210#a&b%2F"
    with recorded.write() as connection:
        connection.execute(text("UPDATE units SET name = :name"), {"name": name})
    address = asker.get("/").headers["location"]
    page = asker.get(address)
    assert page.status_code == 200
    found = [html.unescape(link) for link in re.findall(r'href="(/units/[^"]+)"', page.text)]
    assert len(found) == 10
    for link in [
        *found,
        f"{address}/estimates.json",
        f"{address}/part/flags",
        f"{address}/chart.json?tag=AY2101",
    ]:
        assert asker.get(link).status_code == 200
    assert f'data-address="{html.escape(address)}"' in page.text


def test_the_latest_values_as_json(asker: Any) -> None:
    answer = asker.get(f"/units/{UNIT}/estimates.json").json()
    made = course()
    assert (answer["unit"], answer["time"], answer["cycle"]) == (UNIT, "2026-12-01T15:00:00.000Z", CYCLES - 1)
    (estimate,) = answer["estimates"]
    assert estimate["value"] == float(made.estimate[-1, 0])
    assert estimate["sd"] == float(made.sd[-1, 0])
    assert (estimate["tag"], estimate["unit"], estimate["status"]) == ("AY2101", "mol/L", "Good")


@pytest.mark.parametrize(
    "address",
    [
        "/",
        f"/units/{UNIT}",
        "/nowhere",
        "/health",
        "/static/page.css",
        f"/units/{UNIT}/chart.json?tag=AY2101",
    ],
)
def test_every_answer_forbids_scripts_and_requests_from_elsewhere(asker: Any, address: str) -> None:
    headers = asker.get(address).headers
    policy = headers["content-security-policy"].split("; ")
    assert "default-src 'none'" in policy
    assert "script-src 'self'" in policy
    assert "connect-src 'self'" in policy
    assert "frame-ancestors 'none'" in policy
    assert headers["x-content-type-options"] == "nosniff"


def test_pages_hold_no_inline_script_and_no_foreign_address(asker: Any) -> None:
    for address in (
        f"/units/{UNIT}",
        f"/units/{UNIT}/flag?id={FLAG_ID}",
        f"/units/{UNIT}/lab?id=2",
        "/audit-trail",
    ):
        page = asker.get(address).text
        assert re.findall(r"<script(?![^>]* src=\"/static/)[^>]*>", page) == []
        assert re.findall(r"\son\w+=|javascript:", page) == []
        assert re.findall(r"(?:src|href|action)=\"(?!/|#)[^\"]*\"", page) == []


def test_bokeh_comes_from_the_installed_package(asker: Any) -> None:
    answer = asker.get("/static/bokeh/bokeh.min.js")
    assert answer.status_code == 200
    assert len(answer.content) > 500_000


def test_the_trail_says_that_it_is_whole_and_where_it_is_broken(recorded: Database, asker: Any) -> None:
    page = words_of(asker.get("/audit-trail").text)
    assert "whole: 5 entries" in page
    assert "started with this model file" in page
    with recorded.write() as connection:
        names = connection.execute(
            text("SELECT name FROM sqlite_master WHERE type = 'trigger' AND tbl_name = 'audit_trail'")
        ).scalars()
        for name in list(names):
            connection.execute(text(f"DROP TRIGGER {name}"))
        connection.execute(text("UPDATE audit_trail SET actor = 'nobody' WHERE sequence = 3"))
    page = words_of(asker.get("/audit-trail").text)
    assert "broken at entry 3: entry 3 is not as it was written" in page
    assert "guard against changes is gone" in page


def test_older_entries_are_a_page_further(recorded: Database, asker: Any) -> None:
    put = happenings.clear_flag
    with recorded.write() as connection:
        put(connection, FLAG_ID, NOW, "done")
    page = asker.get("/audit-trail?before=3").text
    assert "revision in service" in page
    assert "flag cleared" not in page


@pytest.mark.parametrize("module", ["wording", "chart", "handbook_text"])
def test_examples_in_the_text_are_true(module: str) -> None:
    failed, tried = doctest.testmod(import_module(f"softsensor.web.{module}"))
    assert tried > 0
    assert failed == 0


def test_an_event_of_an_earlier_release_is_told_in_today_s_word(recorded: Database, asker: Any) -> None:
    with recorded.write() as connection:
        happenings.record_event(connection, Event(1, NOW, "suppression", "the tests rest"))
    page = words_of(asker.get(f"/units/{UNIT}/part/events").text)
    assert "rest: the tests rest" in page
    assert "suppression" not in page
