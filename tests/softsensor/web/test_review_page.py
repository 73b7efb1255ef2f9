"""The review of a past period: live beside smoothed, with figures, and clear words where something is not there."""

from __future__ import annotations

import html
import re
from dataclasses import replace
from datetime import UTC, datetime
from typing import Any
from urllib.parse import quote
from xml.etree import ElementTree

import numpy as np
import pytest
from browser.recorded_unit import FLAG_ID, HOUR, MINUTE, MODEL, NOW, OLD_FLAG_ID, UNIT, course
from fastapi import FastAPI

from softsensor.records import decisions, reader
from softsensor.records.decisions import LeftOut
from softsensor.records.engine import Database
from softsensor.records.plant import Deed, Revision, register_revision, set_revision_state
from softsensor.service.live_feed import LiveFeed
from softsensor.service.smoothed_window import SmoothedWindow, smoothed_window
from softsensor.web.app import create_app
from softsensor.web.models_in_service import ModelsInService
from softsensor.web.picture import Area, Marks, Picture, svg_of
from softsensor.web.review_period import Period, period_of_flag, usual_periods

PAGE = f"/units/{UNIT}/review"
UNTIL, HOURS = NOW - 123 * MINUTE, 5
"""Ends before the ten minutes without cycles, whose run is on record from its beginning."""
NORMAL_95 = 1.959963984540054


def words_of(page: str) -> str:
    read = " ".join(html.unescape(re.sub(r"<[^>]+>", " ", page)).split())
    return re.sub(r" ([,.:;)])", r"\1", read).replace("( ", "(")


def asked(until_us: int, hours: float = HOURS) -> str:
    moment = datetime.fromtimestamp(until_us // 1_000_000, UTC)
    return f"{PAGE}?until={quote(moment.isoformat())}&hours={hours:g}"


@pytest.fixture
def page(asker: Any) -> str:
    answer = asker.get(asked(UNTIL))
    assert answer.status_code == 200
    return str(answer.text)


def rows_of_period() -> slice:
    times = course().times
    return slice(
        int(np.searchsorted(times, UNTIL - HOURS * HOUR + 1)), int(np.searchsorted(times, UNTIL + 1))
    )


@pytest.fixture
def smoothed(recorded: Database) -> SmoothedWindow:
    rows = rows_of_period()
    models = ModelsInService(recorded)
    found = smoothed_window(recorded, 1, 1, range(rows.start, rows.stop), models.design)
    assert found is not None
    return found


def test_both_estimates_are_drawn_with_their_intervals_and_the_laboratory(page: str) -> None:
    (picture,) = re.findall(r'<svg class="still".*?</svg>', page, re.DOTALL)
    kinds = [part.get("class") for part in ElementTree.fromstring(picture).iter() if part.get("class")]
    for kind in ("live-band", "smoothed-band", "live", "smoothed", "revised", "flagged"):
        assert kind in kinds, kind
    assert [kinds.count(kind) for kind in ("lab-used", "lab-waiting", "lab-left-out")] == [4, 0, 1]
    assert "live and smoothed estimate with their 95 % intervals" in picture


def test_the_figures_are_those_of_the_records(page: str, smoothed: SmoothedWindow) -> None:
    """Worked out once more from what was put on record and from the smoothed cycles."""
    rows, made = rows_of_period(), course()
    live, sd = made.estimate[rows, 0], made.sd[rows, 0]
    difference = smoothed.cycles.estimate[:, 0] - live
    worst = int(np.argmax(np.abs(difference)))
    at = datetime.fromtimestamp(int(smoothed.cycles.times[worst]) // 1_000_000, UTC)
    shown = words_of(page)
    assert (
        f"Smoothed less live: on average {difference.mean():+.4f} mol/L, at most {difference[worst]:+.4f} mol/L at "
        f"{at:%Y-%m-%d %H:%M:%S} UTC, over {len(live)} cycles." in shown
    )
    halves = NORMAL_95 * sd.mean(), NORMAL_95 * smoothed.cycles.sd[:, 0].mean()
    assert f"on average ± {halves[0]:.4f} mol/L ± {halves[1]:.4f} mol/L" in shown


def test_laboratory_results_are_counted_and_listed(
    page: str, recorded: Database, smoothed: SmoothedWindow
) -> None:
    rows, made = rows_of_period(), course()
    labs = reader.lab_results_of(recorded, 1, UNTIL - HOURS * HOUR, UNTIL)
    used = [lab for lab in labs if lab.status == "used"]
    assert (len(labs), len(used)) == (5, 4)
    at = [int(np.searchsorted(smoothed.cycles.times, lab.sampled_us)) for lab in used]
    values = np.array([lab.value for lab in used])

    def inside(mean: np.ndarray, sd: np.ndarray) -> int:
        return int((np.abs(values - mean[at]) <= NORMAL_95 * sd[at]).sum())

    live = inside(made.estimate[rows, 0], made.sd[rows, 0])
    after = inside(smoothed.cycles.estimate[:, 0], smoothed.cycles.sd[:, 0])
    shown = words_of(page)
    assert f"used that lie inside the interval {live} of 4 {after} of 4" in shown
    assert "The same, the laboratory's own error counted 4 of 4 not judged" in shown
    assert "left out: value: fits the estimate at no time within 12 h of its sampling time" in shown
    assert shown.count(" used ") >= 4


def test_it_says_what_was_given_and_that_it_is_for_review(page: str, asker: Any) -> None:
    shown = words_of(page)
    assert "For review only. Live is what was published at the time" in shown
    assert "laboratory results up to 2026-12-01 12:58:00 UTC, the last cycle of the run." in shown
    assert "known at the newest cycle, 2026-12-01 15:00:00 UTC" in shown
    assert "TI2105 spike since 2026-12-01 10:12:00 UTC, cleared 2026-12-01 10:20:00 UTC" in shown


def test_the_newest_period_is_shown_where_the_address_names_none(asker: Any) -> None:
    """Here cycles are missing without a state after them: live is there, and why nothing is smoothed."""
    shown = words_of(asker.get(PAGE).text)
    assert "Review of R-210 2026-12-01 07:00:00 UTC to 2026-12-01 15:00:00 UTC" in shown
    assert "Not smoothed: cycles before this period are missing on record" in shown
    assert "Smoothed less live" not in shown
    assert "waiting for a person: sampling time: fits the estimate 45 min earlier than stated" in shown


@pytest.mark.parametrize(
    ("query", "expected"),
    [
        ("until=soon", "until: 'soon'; expected a time in UTC such as 2026-12-01T14:00"),
        ("until=2026-13-01", "until: '2026-13-01'; expected a time in UTC such as 2026-12-01T14:00"),
        ("until=0001-01-01T00:00%2B10:00", "expected a time in UTC"),
        ("until=0020-12-01", "expected a time in UTC"),
        ("until=%3Cscript%3E", "until: '<script>'; expected a time in UTC"),
        ("hours=-3", "hours: '-3'; expected a number above 0, such as 8, 24 or 168"),
        ("hours=nan", "hours: 'nan'; expected a number above 0"),
        ("hours=1e300", "hours: '1e300'; expected a number above 0"),
        ("hours=many", "hours: 'many'; expected a number above 0"),
        ("hours=600", "the period is too long: 216000 cycles, expected 200000 at most, which are 555 h"),
    ],
)
def test_nonsense_in_the_address_is_refused_in_words(asker: Any, query: str, expected: str) -> None:
    answer = asker.get(f"{PAGE}?{query}")
    assert answer.status_code == 400
    assert expected in words_of(answer.text)
    assert "<script>" not in answer.text.replace('<script src="/static/times.js" defer></script>', "")


def test_a_unit_that_is_not_there_and_a_period_without_cycles(asker: Any) -> None:
    assert asker.get("/units/none/review").status_code == 404
    for address in (asked(NOW - 300 * HOUR), asked(NOW + 300 * HOUR), f"{PAGE}?until=1970-01-01"):
        answer = asker.get(address)
        assert answer.status_code == 200
        assert "No cycle of R-210 is on record in this period." in words_of(answer.text)
        assert "The newest cycle on record: 2026-12-01 15:00:00 UTC." in words_of(answer.text)


def test_earlier_later_and_other_lengths_are_links(asker: Any, page: str) -> None:
    links = [html.unescape(link) for link in re.findall(r'class="act" href="([^"]+)"', page)]
    assert links == [f"{PAGE}?until=2026-12-01T12%3A57%3A00.000Z&hours={hours}" for hours in (8, 24, 168)] + [
        f"{PAGE}?until=2026-12-01T07%3A57%3A00.000Z&hours=5",
        f"{PAGE}?until=2026-12-01T15%3A00%3A00.000Z&hours=5",
        f"{PAGE}?hours=5",
    ]
    assert asker.get(links[0]).status_code == 200
    newest = asker.get(PAGE).text
    assert ">Later</a>" not in newest


def test_the_unit_s_page_and_the_flag_s_page_lead_here(asker: Any) -> None:
    assert f'href="{PAGE}"' in asker.get(f"/units/{UNIT}").text
    for flag, name in ((FLAG_ID, "TI2101B drift"), (OLD_FLAG_ID, "TI2105 spike")):
        flagged = asker.get(f"/units/{UNIT}/flag?id={quote(flag)}").text
        (link,) = re.findall(r'href="([^"]+/review[^"]+)">Review this period', flagged)
        assert name in words_of(asker.get(html.unescape(link)).text)


def test_a_flag_s_period_holds_its_time_and_ends_with_the_records(recorded: Database) -> None:
    flags = {flag.id: flag for flag in reader.flags_of(recorded, 1)}
    spec = ModelsInService(recorded).spec(1)
    assert period_of_flag(flags[FLAG_ID], spec, NOW) == Period(NOW, 8.0)
    spike = period_of_flag(flags[OLD_FLAG_ID], spec, NOW)
    assert (spike.until_us, spike.hours) == (NOW - 284 * MINUTE + 4 * HOUR, 8.0)
    long = replace(flags[FLAG_ID], onset_us=NOW - 20 * HOUR)
    assert period_of_flag(long, spec, NOW).hours == 168.0
    assert period_of_flag(long, spec, NOW).from_us <= long.onset_us
    assert period_of_flag(replace(long, onset_us=NOW - 18 * HOUR), spec, None).hours == 24.0
    fast = replace(spec, sample_time=2.0)
    assert list(usual_periods(fast)) == ["8 h", "24 h"]
    assert period_of_flag(long, fast, NOW).hours == 24.0


def test_a_sensor_that_was_left_out_is_left_out_here_and_framed(
    recorded: Database, asker: Any, smoothed: SmoothedWindow
) -> None:
    with recorded.write() as connection:
        out = LeftOut("TI2101A", UNTIL - 3 * HOUR, UNTIL - HOUR, False)
        decisions.store_left_out(connection, 1, [out])
    page = asker.get(asked(UNTIL)).text
    assert page.count('class="left-out"') == 1
    rows = rows_of_period()
    wider = smoothed_window(recorded, 1, 1, range(rows.start, rows.stop), ModelsInService(recorded).design)
    assert wider is not None
    ratio = wider.cycles.sd[:, 0] / smoothed.cycles.sd[:, 0]
    assert (ratio >= 1.0 - 1e-9).all()
    assert ratio[(wider.cycles.times > out.since_us) & (wider.cycles.times < UNTIL - HOUR)].min() > 1.1


def test_a_band_is_broken_by_gaps_and_a_far_mark_stands_at_the_edge() -> None:
    area = Area(
        "live-band", [0.0, 1.0, None, 3.0, 4.0], [1.0, 1.0, None, 1.0, 1.0], [2.0, 2.0, None, 2.0, 2.0]
    )
    marks = (
        Marks("lab-left-out", "cross", [1.0, 2.0], [50.0, 1.5], leads=False),
        Marks("lab-used", "circle", [3.0], [2.5]),
    )
    picture = Picture("a", "K", 0.0, 4.0, (), areas=(area,), marks=marks)
    drawn = ElementTree.fromstring(svg_of(picture))
    paths = {
        kind: [p.get("d", "") for p in drawn.iter() if p.get("class") == kind]
        for kind in ("live-band", "lab-left-out", "lab-used")
    }
    assert paths["live-band"][0].count("M") == paths["live-band"][0].count("Z") == 2
    far, near = (float(d.split("m")[0].split()[1]) for d in paths["lab-left-out"])
    assert far == pytest.approx(12.0)
    top = float(paths["lab-used"][0].split("m")[0].split()[1])
    assert far < top < near
    assert top < 24.0, "the far mark has not stretched the axis"
    nearer = replace(marks[0], y=[3.9, 1.5])
    drawn = ElementTree.fromstring(svg_of(replace(picture, marks=(nearer, marks[1]))))
    (moved,) = (p.get("d", "") for p in drawn.iter() if p.get("class") == "lab-used")
    assert float(moved.split("m")[0].split()[1]) > 80.0, "one that is near enough has"


def test_one_period_of_two_revisions_says_what_is_smoothed(
    app_with_two_revisions: FastAPI, make_asker: Any
) -> None:
    shown = words_of(make_asker(app_with_two_revisions).get(asked(UNTIL)).text)
    assert "Smoothed with the revision of the model that ran then, not with the one in service now." in shown


@pytest.fixture
def app_with_two_revisions(recorded: Database) -> FastAPI:
    """The reactor, whose model in service has never run."""
    with recorded.write() as connection:
        deed = Deed("someone", "a new gain", NOW)
        text = MODEL.format(title="Reactor").replace("gain = 1.1", "gain = 1.2")
        new = register_revision(connection, 1, Revision("cd" * 32, text, b"\x00"), deed)
        set_revision_state(connection, 1, "withdrawn", deed)
        set_revision_state(connection, new, "in service", deed)
    return create_app(recorded, LiveFeed())
