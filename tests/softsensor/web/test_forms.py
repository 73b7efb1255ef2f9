"""What people enter: on record with its entry on the audit trail, or refused in words with nothing changed."""

from __future__ import annotations

import json
import re
from typing import Any
from urllib.parse import quote

import pytest
from browser.recorded_unit import FLAG_ID, NOW, UNIT

from softsensor.records import happenings, reader
from softsensor.records.engine import Database

FLAG = f"/units/{UNIT}/flag?id={quote(FLAG_ID)}"
ACKNOWLEDGE, COMMENT, FINDING = (
    f"/units/{UNIT}/flag/{act}?id={quote(FLAG_ID)}" for act in ("acknowledge", "comment", "finding")
)
WAITING_LAB, USED_LAB = 2, 1
DECIDE = f"/units/{UNIT}/lab/decide?id={WAITING_LAB}"
PERSON = {"actor": "A. Müller", "reason": "checked with the shop"}


def last_entry(database: Database) -> Any:
    return reader.latest_audit_entries(database, limit=1)[0]


def count_of_entries(database: Database) -> int:
    return len(reader.audit_entries(database, limit=1000))


def test_acknowledging_is_on_record_and_on_the_trail(recorded: Database, asker: Any) -> None:
    answer = asker.post(ACKNOWLEDGE, {"token": asker.token(FLAG), **PERSON})
    assert (answer.status_code, answer.headers["location"]) == (303, FLAG)
    flag, _ = reader.flag_with_comments(recorded, FLAG_ID)
    assert (flag.acknowledged_by, flag.acknowledged_us) == ("A. Müller", NOW)
    entry = last_entry(recorded)
    assert (entry.actor, entry.action, entry.object) == ("A. Müller", "flag acknowledged", f"flag {FLAG_ID}")
    assert entry.reason == "checked with the shop"
    assert "acknowledged by A. Müller" in asker.get(f"/units/{UNIT}").text


def test_a_comment_is_shown_as_it_was_written(recorded: Database, asker: Any) -> None:
    said = "thermowell <checked>\r\nsecond line"
    asker.post(COMMENT, {"token": asker.token(FLAG), "actor": " B ", "reason": said})
    _, (comment,) = reader.flag_with_comments(recorded, FLAG_ID)
    assert (comment.actor, comment.text) == ("B", "thermowell <checked>\nsecond line")
    assert "thermowell &lt;checked&gt;\nsecond line" in asker.get(FLAG).text
    assert last_entry(recorded).action == "flag commented"


def test_a_confirmed_finding_keeps_as_found_and_as_left(recorded: Database, asker: Any) -> None:
    fields = {
        "token": asker.token(FLAG),
        "finding": "confirmed",
        "as_found": " \u22121.25 ",
        "as_left": "0.02",
    }
    assert asker.post(FINDING, fields | PERSON).status_code == 303
    flag, _ = reader.flag_with_comments(recorded, FLAG_ID)
    assert (flag.finding, flag.finding_by, flag.as_found, flag.as_left) == (
        "confirmed",
        "A. Müller",
        -1.25,
        0.02,
    )
    assert json.loads(last_entry(recorded).after)["as_found"] == -1.25
    page = asker.get(FLAG).text
    assert "-1.25 K" in page
    assert "0.02 K" in page


def test_a_bad_number_comes_back_with_what_was_typed(recorded: Database, asker: Any) -> None:
    typed = {
        "finding": "confirmed",
        "as_found": "1,4<",
        "as_left": "0.02",
        "actor": 'A "B"',
        "reason": "well <dry>",
    }
    answer = asker.post(FINDING, {"token": asker.token(FLAG), **typed})
    assert answer.status_code == 400
    page = answer.text
    assert "Nothing is on record yet: as found is &#39;1,4&lt;&#39;; expected a number" in page
    for field in (
        'value="confirmed" required checked',
        'value="1,4&lt;"',
        'value="0.02"',
        'value="A &#34;B&#34;"',
    ):
        assert field in page
    assert ">well &lt;dry&gt;</textarea>" in page
    found = re.search(r'name="token" value="([0-9a-f]+)"', page)
    assert found is not None
    assert asker.post(FINDING, {"token": found[1], **typed, "as_found": "1.4"}).status_code == 303
    flag, _ = reader.flag_with_comments(recorded, FLAG_ID)
    assert (flag.as_found, flag.as_left, flag.finding_by) == (1.4, 0.02, 'A "B"')


@pytest.mark.parametrize(
    ("address", "page", "field"),
    [
        (f"/units/{UNIT}/flag/acknowledge?id={quote(FLAG_ID)}", FLAG, "acknowledge-reason"),
        (f"/units/{UNIT}/flag/comment?id={quote(FLAG_ID)}", FLAG, "comment-reason"),
        (DECIDE + "&decision=use", f"/units/{UNIT}/lab?id={WAITING_LAB}", "decide-reason"),
    ],
)
def test_a_form_without_a_name_comes_back_with_its_text_in_its_own_field(
    recorded: Database, asker: Any, address: str, page: str, field: str
) -> None:
    before = last_entry(recorded)
    typed = {"actor": " ", "reason": "well <dry>", "decision": "use"}
    answer = asker.post(address, {"token": asker.token(page), **typed})
    assert answer.status_code == 400
    assert answer.text.count("Nothing is on record yet: your name is missing") == 1
    texts = dict(re.findall(r'<textarea id="([a-z-]+)"[^>]*>([^<]*)</textarea>', answer.text))
    assert texts.pop(field) == "well &lt;dry&gt;"
    assert set(texts.values()) <= {""}
    assert last_entry(recorded) == before


def test_a_finding_shows_its_calibration_on_the_units_page_too(asker: Any) -> None:
    assert "Size at detection" in asker.get(FLAG).text
    fields = {"token": asker.token(FLAG), "finding": "confirmed", "as_found": "-1.25", **PERSON}
    assert asker.post(FINDING, fields).status_code == 303
    page = asker.get(FLAG).text
    assert "<dt>As found</dt><dd>-1.25 K</dd>" in page
    assert "<dt>As left</dt><dd>not entered</dd>" in page
    listed = asker.get(f"/units/{UNIT}/part/flags").text
    assert "confirmed, A. Müller; error as found -1.25 K, as left not entered" in listed
    assert "Size at detection" in listed


def test_a_waiting_result_is_decided_once(recorded: Database, asker: Any) -> None:
    page = f"/units/{UNIT}/lab?id={WAITING_LAB}"
    token = asker.token(page)
    assert asker.post(DECIDE, {"token": token, "decision": "leave out", **PERSON}).status_code == 303
    lab = next(lab for lab in reader.lab_results_of(recorded, 1) if lab.id == WAITING_LAB)
    assert (lab.status, lab.reason, lab.decided_by) == ("left out", "checked with the shop", "A. Müller")
    again = asker.post(DECIDE, {"token": token, "decision": "leave out", **PERSON})
    assert again.status_code == 400
    assert "expected one of: use" in again.text
    assert asker.post(DECIDE, {"token": token, "decision": "use", **PERSON}).status_code == 303
    assert last_entry(recorded).action == "laboratory result decided"
    assert "Nothing is left to decide" in asker.get(page).text
    assert "None." in asker.get(f"/units/{UNIT}/part/laboratory").text


def test_a_result_that_the_laboratory_has_corrected_shows_the_new_value_and_is_not_decided(
    recorded: Database, asker: Any
) -> None:
    page = f"/units/{UNIT}/lab?id={WAITING_LAB}"
    old = next(lab for lab in reader.lab_results_of(recorded, 1) if lab.id == WAITING_LAB)
    token = asker.token(page)
    with recorded.write() as connection:
        result = happenings.LabResult(old.tag, old.sampled_us, old.reported_us + 60_000_000, 1.3125)
        new = happenings.store_lab(connection, 1, result)
        used = happenings.LabOutcome("used", "", 50, 40, 1.31, 0.0025, 0.02)
        happenings.settle_lab(connection, new, used)
        happenings.replace_labs(connection, new, "replaced by 1.3125", old.reported_us + 60_000_000)
    text = asker.get(page).text
    assert "replaced by 1.3125" in text
    assert "Same sample, later" in text
    assert f"lab?id={new}" in text
    assert "Nothing is left to decide" in text
    refused = asker.post(DECIDE, {"token": token, "decision": "use", **PERSON})
    assert (refused.status_code, "the result is left out already" in refused.text) == (400, True)
    assert "Same sample, earlier" in asker.get(f"/units/{UNIT}/lab?id={new}").text


BAD = {
    "no name": (ACKNOWLEDGE, {"actor": " ", "reason": "x"}, "your name is missing"),
    "no reason": (ACKNOWLEDGE, {"actor": "A"}, "the reason is missing"),
    "two-line name": (ACKNOWLEDGE, {"actor": "A\nB", "reason": "x"}, "your name has more than one line"),
    "long name": (ACKNOWLEDGE, {"actor": "A" * 101, "reason": "x"}, "101 characters; expected at most 100"),
    "no text": (COMMENT, {"actor": "A", "reason": "a\x00b"}, "cannot be printed"),
    "long text": (COMMENT, {"actor": "A", "reason": "x" * 2001}, "2001 characters; expected at most 2000"),
    "no finding": (FINDING, PERSON, "expected one of: confirmed, not confirmed, process change, undecided"),
    "other finding": (FINDING, PERSON | {"finding": "<b>true"}, "expected one of: confirmed"),
    "comma": (
        FINDING,
        PERSON | {"finding": "confirmed", "as_found": "1,4"},
        "expected a number with a decimal point",
    ),
    "nan": (FINDING, PERSON | {"finding": "confirmed", "as_left": "nan"}, "as left is"),
    "underscore": (FINDING, PERSON | {"finding": "confirmed", "as_left": "1_0"}, "as left is"),
    "not confirmed": (
        FINDING,
        PERSON | {"finding": "undecided", "as_found": "1"},
        "belong to a confirmed finding",
    ),
    "no decision": (DECIDE, PERSON, "expected one of: use, leave out"),
    "used already": (DECIDE.replace("=2", "=1"), PERSON | {"decision": "use"}, "the result is used already"),
}


@pytest.mark.parametrize("case", BAD)
def test_what_cannot_be_taken_is_told_with_what_was_expected(
    recorded: Database, asker: Any, case: str
) -> None:
    address, fields, expected = BAD[case]
    before = count_of_entries(recorded)
    answer = asker.post(address, {"token": asker.token(FLAG), **fields})
    assert answer.status_code == 400
    assert expected in answer.text
    assert "<b>true" not in answer.text
    assert count_of_entries(recorded) == before


@pytest.mark.parametrize(
    ("address", "status"),
    [
        (f"/units/{UNIT}/flag/acknowledge?id=gone", 404),
        (f"/units/X-1/flag/acknowledge?id={quote(FLAG_ID)}", 404),
        (f"/units/{UNIT}/lab/decide?id=99", 404),
        (f"/units/{UNIT}/lab/decide?id=x", 400),
        (f"/units/{UNIT}/flag/acknowledge", 400),
    ],
)
def test_a_form_for_nothing_is_refused(asker: Any, address: str, status: int) -> None:
    answer = asker.post(address, {"token": asker.token(FLAG), "decision": "use", **PERSON})
    assert answer.status_code == status
    assert "Traceback" not in answer.text


@pytest.mark.parametrize("address", [ACKNOWLEDGE, COMMENT, FINDING, DECIDE])
@pytest.mark.parametrize(
    "forged",
    [
        {"origin": "http://evil.test"},
        {"origin": "null"},
        {"origin": "http://plant.test.evil.test"},
        {"origin": None},
        {"token": ""},
        {"token": "0" * 64},
        {"token": "é"},
        {"cookie": "another"},
        {"cookie": ""},
    ],
)
def test_a_form_from_elsewhere_changes_nothing(
    recorded: Database, asker: Any, address: str, forged: dict[str, Any]
) -> None:
    fields = {"token": asker.token(FLAG), "finding": "confirmed", "decision": "use", **PERSON}
    if "token" in forged:
        fields["token"] = forged["token"]
    if "cookie" in forged:
        asker.cookies.clear()
        asker.cookies.set("softsensor_form", forged["cookie"])
    before = count_of_entries(recorded)
    answer = asker.post(address, fields, **({"origin": forged["origin"]} if "origin" in forged else {}))
    assert answer.status_code == 403
    assert count_of_entries(recorded) == before


def test_the_browser_s_own_word_on_a_forms_origin_counts(recorded: Database, asker: Any) -> None:
    fields = {"token": asker.token(FLAG), **PERSON}
    for said in ("cross-site", "same-site", "none"):
        headers = {"Origin": "http://plant.test", "Sec-Fetch-Site": said}
        assert asker.ask("POST", ACKNOWLEDGE, data=fields, headers=headers).status_code == 403
    assert (
        asker.ask("POST", ACKNOWLEDGE, data=fields, headers={"Sec-Fetch-Site": "same-origin"}).status_code
        == 303
    )


def test_the_cookie_is_for_this_site_s_pages_alone(asker: Any) -> None:
    cookie = asker.get(FLAG).headers["set-cookie"]
    assert "HttpOnly" in cookie
    assert "SameSite=strict" in cookie
    assert "set-cookie" not in asker.get(FLAG).headers
