"""Putting a sensor back, leaving one out, letting tests rest: on the page, on record, on the trail, or refused in words."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import Any
from urllib.parse import quote

import pytest
from browser.recorded_unit import FLAG_ID, HOUR, MINUTE, NOW, OLD_FLAG_ID, UNIT
from sqlalchemy import update

from softsensor.detection.flags import RestSpell
from softsensor.records import decisions, reader
from softsensor.records.decisions import LeftOut, Outcome
from softsensor.records.engine import Database
from softsensor.records.rests import store_rests
from softsensor.records.tables import flags

FLAG = f"/units/{UNIT}/flag?id={quote(FLAG_ID)}"
PUT_BACK = f"/units/{UNIT}/flag/put-back?id={quote(FLAG_ID)}"
SENSOR, TESTS = f"/units/{UNIT}/sensor?tag=TI2101B", f"/units/{UNIT}/tests"
LEAVE_OUT, END_EARLY = (f"/units/{UNIT}/sensor/{act}?tag=TI2101B" for act in ("leave-out", "put-back"))
REST, GO_ON = f"{TESTS}/rest", f"{TESTS}/go-on"
PERSON = {"actor": "A. Müller", "reason": "new element"}
CALIBRATED = {"finding": "confirmed", "as_found": "1.2", "as_left": "-0.03", **PERSON}


def put_left_out(database: Database, until_us: int | None = None, by_person: bool = False) -> None:
    row = LeftOut("TI2101B", NOW - HOUR, until_us, by_person)
    with database.write() as connection:
        decisions.store_left_out(connection, 1, [row])


def settle(database: Database, until_us: int | None) -> None:
    """What the service puts on record when a cycle takes the decisions that wait."""
    for item in decisions.waiting_decisions(database, 1):
        with database.write() as connection:
            decisions.settle_decision(connection, item.id, Outcome(2880, NOW, until_us, ""))


def entries(database: Database) -> list[Any]:
    return reader.audit_entries(database, limit=1000)


def test_a_left_out_sensor_is_put_back_with_what_was_found(recorded: Database, asker: Any) -> None:
    put_left_out(recorded)
    for page in (FLAG, SENSOR):
        assert f'href="{PUT_BACK}">Put TI2101B back</a>' in asker.get(page).text
    answer = asker.post(PUT_BACK, {"token": asker.token(PUT_BACK), **CALIBRATED})
    assert (answer.status_code, answer.headers["location"]) == (303, FLAG)
    flag, _ = reader.flag_with_comments(recorded, FLAG_ID)
    assert (flag.finding, flag.finding_by, flag.as_found, flag.as_left) == (
        "confirmed",
        "A. Müller",
        1.2,
        -0.03,
    )
    (waiting,) = decisions.waiting_decisions(recorded, 1)
    assert (waiting.act, waiting.tag, waiting.flag_id, waiting.actor) == (
        "put back",
        "TI2101B",
        FLAG_ID,
        "A. Müller",
    )
    assert [entry.action for entry in entries(recorded)[-2:]] == ["finding", "sensor put back"]
    assert entries(recorded)[-1].object == f"sensor TI2101B of unit {UNIT}"
    assert entries(recorded)[-1].reason == "new element"
    page = asker.get(PUT_BACK).text
    assert "has entered a finding on TI2101B" in page
    assert "<form" not in page
    again = asker.post(PUT_BACK, {"token": asker.token(FLAG), **CALIBRATED})
    assert again.status_code == 400
    assert "a finding on TI2101B waits already" in again.text


def test_a_bad_number_comes_back_with_what_was_typed(recorded: Database, asker: Any) -> None:
    put_left_out(recorded)
    answer = asker.post(PUT_BACK, {"token": asker.token(PUT_BACK), **CALIBRATED, "as_found": "1,2"})
    assert answer.status_code == 400
    assert "Nothing is on record yet: as found is &#39;1,2&#39;; expected a number" in answer.text
    for field in ('value="confirmed" required checked', 'value="1,2"', 'value="-0.03"', 'value="A. Müller"'):
        assert field in answer.text
    assert ">new element</textarea>" in answer.text
    assert decisions.waiting_decisions(recorded, 1) == []


def test_an_open_flag_on_a_sensor_in_use_is_answered_by_a_finding(recorded: Database, asker: Any) -> None:
    assert f'href="{PUT_BACK}">Answer this flag</a>' in asker.get(FLAG).text
    assert "Enter the finding and clear the flag" in asker.get(PUT_BACK).text
    given = {"token": asker.token(PUT_BACK), "finding": "not confirmed", **PERSON}
    assert asker.post(PUT_BACK, given).status_code == 303
    (waiting,) = decisions.waiting_decisions(recorded, 1)
    assert (waiting.act, waiting.tag, waiting.flag_id) == ("put back", "TI2101B", FLAG_ID)
    flag, _ = reader.flag_with_comments(recorded, FLAG_ID)
    assert flag.finding == "not confirmed"


def test_a_cleared_flag_on_a_sensor_in_use_has_nothing_to_put_back(recorded: Database, asker: Any) -> None:
    with recorded.write() as connection:
        connection.execute(update(flags).values(cleared_us=NOW, state="cleared"))
    assert "put-back" not in asker.get(FLAG).text
    assert "nothing to put back" in asker.get(PUT_BACK).text
    answer = asker.post(PUT_BACK, {"token": asker.token(FLAG), **CALIBRATED})
    assert answer.status_code == 400
    assert "TI2101B is in use" in answer.text
    assert decisions.waiting_decisions(recorded, 1) == []


def test_a_left_out_sensor_asks_for_maintenance_also_once_its_flag_is_cleared(
    recorded: Database, asker: Any
) -> None:
    with recorded.write() as connection:
        connection.execute(update(flags).values(cleared_us=NOW, state="cleared"))
    row = f"/units/{UNIT}/part/sensors"
    assert "maintenance required" not in asker.get(row).text
    put_left_out(recorded)
    assert '<b class="letter" aria-hidden="true">M</b> maintenance required' in asker.get(row).text


def test_a_sensor_is_left_out_for_a_time_and_back_sooner(recorded: Database, asker: Any) -> None:
    fields = {"token": asker.token(SENSOR), "time": "2.5 h", **PERSON}
    answer = asker.post(LEAVE_OUT, fields)
    assert (answer.status_code, answer.headers["location"]) == (303, SENSOR)
    (waiting,) = decisions.waiting_decisions(recorded, 1)
    assert (waiting.act, waiting.tag, waiting.seconds) == ("leave out", "TI2101B", 9000.0)
    assert entries(recorded)[-1].action == "sensor left out"
    assert json.loads(entries(recorded)[-1].after)["seconds"] == 9000.0
    assert "Waits for the next cycle" in asker.get(SENSOR).text
    settle(recorded, NOW + 2 * HOUR)
    put_left_out(recorded, NOW + 2 * HOUR, by_person=True)
    page = asker.get(SENSOR).text
    assert "left out for work on it" in page
    assert "function check" in page
    row = asker.get(f"/units/{UNIT}/part/sensors").text
    assert '<b class="letter" aria-hidden="true">C</b> function check' in row
    assert asker.post(END_EARLY, {"token": asker.token(SENSOR), **PERSON}).status_code == 303
    (waiting,) = decisions.waiting_decisions(recorded, 1)
    assert (waiting.act, waiting.flag_id) == ("put back", None)


def test_the_tests_rest_with_who_why_and_until_when(recorded: Database, asker: Any) -> None:
    fields = {"token": asker.token(TESTS), "occasion": "start-up", "time": "90 min", **PERSON}
    assert asker.post(REST, fields).status_code == 303
    assert entries(recorded)[-1].action == "tests put to rest"
    settle(recorded, NOW + 90 * MINUTE)
    with recorded.write() as connection:
        spell = RestSpell("start-up", "", NOW, NOW + 90 * MINUTE, "A. Müller: new element")
        store_rests(connection, 1, [spell])
    page = asker.get(TESTS).text
    assert "At rest until" in page
    assert "start-up, A. Müller" in page
    assert "new element" in page
    state = asker.get(f"/units/{UNIT}/part/state").text
    assert "at rest: start-up, until 2026-12-01 16:30:00 UTC" in state
    assert asker.post(GO_ON, {"token": asker.token(TESTS), **PERSON}).status_code == 303
    assert entries(recorded)[-1].action == "tests go on"
    settle(recorded, None)
    with recorded.write() as connection:
        store_rests(connection, 1, [replace(spell, until=NOW)])
    assert "The tests are running" in asker.get(TESTS).text
    assert "running" in asker.get(f"/units/{UNIT}/part/state").text


def test_what_was_typed_about_a_rest_and_about_leaving_out_comes_back(recorded: Database, asker: Any) -> None:
    typed = {"occasion": "shutdown", "time": "soon", **PERSON}
    answer = asker.post(REST, {"token": asker.token(TESTS), **typed})
    assert answer.status_code == 400
    for part in (
        'value="shutdown" required checked',
        'value="soon"',
        'value="A. Müller"',
        ">new element</textarea>",
    ):
        assert part in answer.text
    assert answer.text.count('role="alert"') == 1
    answer = asker.post(LEAVE_OUT, {"token": asker.token(SENSOR), "time": "3 h", "actor": "A. Müller"})
    assert answer.status_code == 400
    assert "Nothing is on record yet: the reason is missing" in answer.text
    assert 'value="3 h"' in answer.text
    assert 'value="A. Müller"' in answer.text


BAD = {
    "no calibration": (
        PUT_BACK,
        PERSON | {"finding": "confirmed"},
        "as found and as left; expected two numbers",
    ),
    "an error that no instrument has": (
        PUT_BACK,
        CALIBRATED | {"as_found": "1e308"},
        "expected an error no larger than the range is wide, ",
    ),
    "no finding": (PUT_BACK, PERSON, "expected one of: confirmed"),
    "no name": (PUT_BACK, CALIBRATED | {"actor": ""}, "your name is missing"),
    "no time": (LEAVE_OUT, PERSON, "expected a time such as"),
    "no unit": (LEAVE_OUT, PERSON | {"time": "5"}, "expected a time such as"),
    "nothing": (LEAVE_OUT, PERSON | {"time": "0 h"}, "expected a time such as"),
    "too long": (LEAVE_OUT, PERSON | {"time": "31 d"}, "at most 30 d"),
    "no reason": (LEAVE_OUT, {"time": "1 h", "actor": "A"}, "the reason is missing"),
    "not left out": (END_EARLY, PERSON, "there is nothing to end"),
    "occasion": (REST, PERSON | {"time": "1 h", "occasion": "tea"}, "expected one of: start-up, shutdown"),
    "rest too long": (REST, PERSON | {"time": "5 week", "occasion": "shutdown"}, "at most 30 d"),
    "not at rest": (GO_ON, PERSON, "there is nothing to end"),
}


@pytest.mark.parametrize("case", BAD)
def test_what_cannot_be_taken_is_told_and_changes_nothing(recorded: Database, asker: Any, case: str) -> None:
    put_left_out(recorded)
    address, fields, expected = BAD[case]
    before = len(entries(recorded))
    answer = asker.post(address, {"token": asker.token(TESTS), **fields})
    assert answer.status_code == 400
    assert expected in answer.text
    assert len(entries(recorded)) == before
    assert decisions.waiting_decisions(recorded, 1) == []


FORMS = {
    PUT_BACK: CALIBRATED,
    LEAVE_OUT: PERSON | {"time": "1 h"},
    END_EARLY: PERSON,
    REST: PERSON | {"time": "1 h", "occasion": "start-up"},
    GO_ON: PERSON,
}


@pytest.mark.parametrize("address", FORMS)
@pytest.mark.parametrize(
    ("origin", "token"), [("http://evil.test", None), (None, None), ("http://plant.test", "0" * 64)]
)
def test_a_form_from_elsewhere_changes_nothing(
    recorded: Database, asker: Any, address: str, origin: str | None, token: str | None
) -> None:
    put_left_out(recorded)
    before = len(entries(recorded))
    good = asker.token(TESTS)
    answer = asker.post(address, {**FORMS[address], "token": token or good}, origin=origin)
    assert answer.status_code == 403
    assert len(entries(recorded)) == before


@pytest.mark.parametrize(
    "address",
    [
        f"/units/{UNIT}/sensor?tag=TI9",
        f"/units/{UNIT}/sensor?tag=FI2103",
        "/units/X-1/tests",
        f"/units/{UNIT}/flag/put-back?id=gone",
        f"/units/{UNIT}/flag/sheet?id=gone",
        f"/units/X-1/flag/sheet?id={quote(OLD_FLAG_ID)}",
    ],
)
def test_what_is_not_there_is_said(asker: Any, address: str) -> None:
    assert asker.get(address).status_code == 404


def test_false_flags_stand_promised_beside_achieved(recorded: Database, asker: Any) -> None:
    page = asker.get(f"/units/{UNIT}/promise").text
    assert "Promised: one false flag per 30 d and sensor" in page
    row = page.split('<th scope="row">TI2101B</th>')[1].split("</tr>")[0]
    assert '<td class="right">7.83 h</td>' in row  # eight hours less ten minutes that are not on record
    assert "none false" in row
    assert f'href="/units/{UNIT}/promise"' in asker.get(f"/units/{UNIT}").text
    with recorded.write() as connection:
        store_rests(connection, 1, [RestSpell("off: FI2103 below 2", "", NOW - 4 * HOUR, None, "0.1 m3/h")])
    row = asker.get(f"/units/{UNIT}/promise").text.split('<th scope="row">TI2101B</th>')[1].split("</tr>")[0]
    assert '<td class="right">4 h</td>' in row
