"""The page as a person meets it: drawn, live, usable from the keyboard, and silent towards the outside."""

from __future__ import annotations

import re
from typing import Any

import pytest
from browser.conftest import Served, Watched, watched_page
from browser.recorded_unit import CYCLES, FLAG_ID, MINUTE, NOW, STEP, UNIT, put_cycle
from playwright.sync_api import Browser, Page, expect

from softsensor.records import happenings, reader
from softsensor.records.audit import verify
from softsensor.records.happenings import Flag
from softsensor.service.live_feed import News

ROWS = "Bokeh.documents[0].get_model_by_name('estimate').data.x.length"

WIDTH = "(() => { const r = Bokeh.documents[0].get_model_by_name('time'); return r.end - r.start; })()"


def opened(site: Served, page: Page) -> Any:
    """The unit's page, drawn and live; returns the answer that it came with."""
    answer = page.goto(site.address + f"/units/{UNIT}")
    page.locator(".estimate .chart canvas").first.wait_for()
    page.locator("#unit[data-live=yes]").wait_for(state="attached")
    return answer


def cycle(k: int, value: float, status: str = "Good", reason: str = "") -> News:
    """News of the ``k``-th cycle after the recorded ones."""
    estimate = {"value": value, "sd": 0.03, "lower": value - 0.06, "upper": value + 0.06}
    body = {
        "time": NOW + k * STEP,
        "cycle": CYCLES - 1 + k,
        "estimates": {"AY2101": estimate | {"status": status, "reason": reason}},
        "sensors": {},
    }
    return News(UNIT, "cycle", body)


def test_the_page_is_drawn_without_complaint_and_asks_nothing_outside(
    site: Served, browser_page: Watched
) -> None:
    answer = opened(site, browser_page.page)
    assert "script-src 'self';" in answer.headers["content-security-policy"]
    expect(browser_page.page.locator(".big .value")).to_have_text(re.compile(r"^1\.\d{3}$"))
    assert browser_page.page.evaluate(ROWS) > 1000
    browser_page.page.evaluate(
        "new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(done)))"
    )
    browser_page.assert_quiet()


def test_a_request_to_the_outside_would_be_noticed(site: Served, browser_page: Watched) -> None:
    opened(site, browser_page.page)
    asked = "fetch('http://example.test/x').then(() => 'answered', () => 'refused')"
    assert browser_page.page.evaluate(asked) == "refused"
    assert any("Content Security Policy" in line for line in browser_page.complaints)
    browser_page.page.goto("about:blank")
    with browser_page.page.expect_event("requestfailed"):
        browser_page.page.evaluate("new Image().src = 'http://example.test/y.png'")
    assert browser_page.outside == ["http://example.test/y.png"]


def test_times_are_local_with_their_offset(site: Served, browser_page: Watched) -> None:
    opened(site, browser_page.page)
    shown = browser_page.page.locator("#cycle-time time")
    expect(shown).to_have_text("2026-12-01 16:00:00 +01:00 (15:00:00 UTC)")
    expect(browser_page.page.locator(".flag time").first).to_have_attribute(
        "title", "2026-12-01 14:00:00 UTC"
    )


def test_new_cycles_change_the_number_and_lengthen_the_line(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    before = page.evaluate(ROWS)
    site.publish(cycle(1, 1.4567))
    expect(page.locator(".big .value")).to_have_text("1.457")
    expect(page.locator(".interval .figures")).to_have_text("1.397 to 1.517 mol/L")
    expect(page.locator("#cycle-time time")).to_contain_text("16:00:10 +01:00")
    assert page.evaluate(ROWS) == before + 1
    site.publish(cycle(2, 1.2, "Uncertain", "TI2101B is left out"))
    expect(page.locator(".quality-uncertain")).to_have_text("Uncertain TI2101B is left out")
    assert page.evaluate(ROWS) == before + 2
    site.publish(cycle(9, 1.3))
    expect(page.locator(".big .value")).to_have_text("1.300")
    assert page.evaluate(ROWS) == before + 4
    assert page.evaluate("Number.isNaN(" + ROWS.replace(".x.length", ".value.at(-2)") + ")")
    browser_page.assert_quiet()


def test_sensors_renew_themselves_and_the_focus_stays(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    button = page.get_by_role("button", name="TI2105")
    button.focus()
    put_cycle(site.database, CYCLES, NOW + STEP, 61.5)
    site.publish(cycle(1, 1.3))
    expect(page.locator("tr", has=button)).to_contain_text("61.50 degC")
    expect(page.locator("tr", has=button)).to_contain_text("in use")
    expect(button).to_be_focused()
    browser_page.assert_quiet()


def test_a_new_flag_appears_and_is_said(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    flag = Flag("new", "TI2101A", "stuck", NOW - MINUTE, NOW, float("nan"), float("nan"), 0.93, ("TI2101A",))
    with site.database.write() as connection:
        happenings.open_flag(connection, 1, flag)
    site.publish(News(UNIT, "flag", {"tag": "TI2101A", "kind": "stuck", "cleared": None}))
    expect(page.locator(".card.flag")).to_have_count(2)
    expect(page.locator(".card.flag").filter(has_text="TI2101A stuck")).to_contain_text("93 %, named alone")
    expect(page.locator("tr", has=page.get_by_role("button", name="TI2101A"))).to_contain_text("F failure")
    expect(page.locator("#said")).to_have_text("Flag on TI2101A, stuck, opened.")
    browser_page.assert_quiet()


def test_a_flag_is_acknowledged_from_the_keyboard_and_lands_on_the_trail(
    site: Served, browser_page: Watched
) -> None:
    page = browser_page.page
    opened(site, page)
    page.get_by_role("link", name="Acknowledge, comment, finding of TI2101B drift").focus()
    page.keyboard.press("Enter")
    form = page.locator("form", has=page.get_by_role("button", name="Acknowledge"))
    form.get_by_label("Your name").fill("A. Müller")
    page.keyboard.press("Tab")
    page.keyboard.type("seen on the round")
    page.keyboard.press("Tab")
    page.keyboard.press("Enter")
    expect(page.get_by_role("heading", level=1)).to_contain_text("open, acknowledged")
    entry = reader.latest_audit_entries(site.database, limit=1)[0]
    assert (entry.actor, entry.action, entry.reason) == (
        "A. Müller",
        "flag acknowledged",
        "seen on the round",
    )
    assert entry.object == f"flag {FLAG_ID}"
    assert verify(site.database).whole
    page.get_by_role("link", name="Audit trail").click()
    expect(page.locator("tbody tr").first).to_contain_text("A. Müller")
    expect(page.locator(".states")).to_contain_text("whole: 6 entries")
    browser_page.assert_quiet()


def test_a_finding_and_a_laboratory_decision(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    page.get_by_role("link", name="Acknowledge, comment, finding of TI2101B drift").click()
    form = page.locator("form", has=page.get_by_role("button", name="Put the finding on record"))
    form.get_by_label("confirmed", exact=True).check()
    form.get_by_label("Error as found, K").fill("1.30")
    form.get_by_label("Your name").fill("B. Shop")
    form.get_by_label("Reason").fill("calibrated")
    form.get_by_role("button").click()
    expect(page.locator(".facts").first).to_contain_text("1.3 K")
    page.get_by_role("link", name=UNIT).click()
    page.get_by_role("link", name="Use or leave out the result of AL2101").click()
    page.get_by_label("Your name").fill("B. Shop")
    page.get_by_label("Reason").fill("bottle mixed up")
    page.get_by_role("button", name="Leave out").click()
    expect(page.get_by_role("heading", level=1)).to_contain_text("left out")
    made = [entry.action for entry in reader.latest_audit_entries(site.database, limit=2)]
    assert made == ["laboratory result decided", "finding"]
    browser_page.assert_quiet()


def test_another_period_is_drawn(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    page.get_by_role("button", name="1 h").click()
    expect(page.get_by_role("button", name="1 h")).to_have_attribute("aria-pressed", "true")
    expect(page.locator(".estimate .chart")).to_have_attribute("data-drawn", "1")
    assert page.evaluate("Bokeh.documents.length") == 1
    assert page.evaluate(WIDTH) == 1.02 * 3_600_000
    browser_page.assert_quiet()


def test_a_chart_starts_with_what_is_on_record(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    page.get_by_role("button", name="24 h").click()
    expect(page.locator(".estimate .chart")).to_have_attribute("data-drawn", "24")
    first = NOW - (CYCLES - 1) * STEP + 60 * MINUTE
    assert page.evaluate("Bokeh.documents[0].get_model_by_name('time').start") == first / 1000
    browser_page.assert_quiet()


def test_a_sensors_chart_opens_and_closes_from_the_keyboard(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    button = page.get_by_role("button", name="TI2101B")
    button.focus()
    page.keyboard.press("Enter")
    expect(button).to_have_attribute("aria-expanded", "true")
    page.locator("#sensor-chart .chart canvas").first.wait_for(timeout=20_000)
    names = "['reading', 'predicted', 'high', 'low'].map((n) => Bokeh.documents.at(-1).get_model_by_name(n).data.x.length)"
    assert min(page.evaluate(names)) > 1000
    page.get_by_role("button", name="Close").focus()
    page.keyboard.press("Enter")
    expect(page.locator("#sensor-chart")).to_be_hidden()
    assert page.evaluate("Bokeh.documents.length") == 1
    expect(button).to_be_focused()
    browser_page.assert_quiet()


def test_a_program_that_ends_is_said(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    site.stop()
    expect(page.locator("#stream")).to_contain_text("lost its connection to the program")
    assert browser_page.outside == []


@pytest.mark.parametrize(("width", "height"), [(1280, 800), (1920, 1080), (420, 800)])
def test_nothing_sticks_out_sideways(site: Served, chromium: Browser, width: int, height: int) -> None:
    with watched_page(chromium, width, height) as watched:
        opened(site, watched.page)
        for address in (
            f"/units/{UNIT}",
            f"/units/{UNIT}/flag?id={FLAG_ID}",
            f"/units/{UNIT}/lab?id=2",
            "/audit-trail",
        ):
            watched.page.goto(site.address + address)
            wide = watched.page.evaluate("document.documentElement.scrollWidth")
            assert wide <= width, address


def test_on_a_small_screen_the_estimate_flag_and_sensors_are_in_sight(
    site: Served, browser_page: Watched
) -> None:
    opened(site, browser_page.page)
    for shown in (".big .value", ".card.flag .act", ".card.waiting .act", "tr.flagged"):
        box = browser_page.page.locator(shown).first.bounding_box()
        assert box is not None
        assert box["y"] + box["height"] <= 800, shown


def test_the_models_page_opens_from_the_units_page_and_fits_a_narrow_screen(
    site: Served, browser_page: Watched
) -> None:
    page = browser_page.page
    opened(site, page)
    page.get_by_role("link", name="Model").click(timeout=60_000)
    expect(page.get_by_role("heading", name=re.compile("^Model of"))).to_be_visible(timeout=60_000)
    expect(page.get_by_role("heading", name="Smallest step and slowest drift found within")).to_be_visible()
    page.set_viewport_size({"width": 400, "height": 800})
    # the browser lays the page out anew some time after it has been told the size
    page.wait_for_function("document.documentElement.scrollWidth <= 400")
    browser_page.assert_quiet()


def test_the_review_opens_steps_and_prints_within_a_sheet(site: Served, browser_page: Watched) -> None:
    page = browser_page.page
    opened(site, page)
    page.get_by_role("link", name="Review a past period").click(timeout=60_000)
    expect(page.get_by_role("heading", name=re.compile("^Review of"))).to_be_visible(timeout=60_000)
    page.get_by_label("Up to (UTC)").fill("2026-12-01 12:50:00")
    page.get_by_role("button", name="Go").click()
    expect(page.get_by_text("Smoothed less live")).to_be_visible(timeout=60_000)
    expect(page.locator("svg.still path.smoothed")).to_have_count(1)
    page.get_by_role("link", name="Earlier").click()
    expect(page.get_by_label("Up to (UTC)")).to_have_value("2026-12-01 04:50:00", timeout=60_000)
    page.go_back()
    page.set_viewport_size({"width": 400, "height": 800})
    page.wait_for_function("document.documentElement.scrollWidth <= 400")
    page.emulate_media(media="print")
    page.set_viewport_size({"width": 718, "height": 1000})
    page.wait_for_function("document.documentElement.scrollWidth <= 718")
    expect(page.locator(".review-bar")).to_be_hidden()
    browser_page.assert_quiet()
