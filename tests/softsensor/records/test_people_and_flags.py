"""Flags, laboratory results and what people decide: each change with its entry on the trail, each counted once."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import pytest

from softsensor.errors import RecordsError
from softsensor.records import changes, happenings, reader
from softsensor.records.audit import verify
from softsensor.records.engine import Database
from softsensor.records.happenings import Event, Flag, LabOutcome, LabResult
from softsensor.records.plant import Deed, Revision, register_revision, set_revision_state

NOW = 1_796_083_200_000_000
FLAG_ID = happenings.flag_identity("R-210", "TI2101A", "drift", NOW)
FLAG = Flag(FLAG_ID, "TI2101A", "drift", NOW - 60_000_000, NOW, 1.5, 0.2, 0.97, ("TI2101A", "TI2101B"))
WAITING = LabOutcome("waiting for a person", "6.1 sd from the estimate", 40, None, 1.3, 0.7, 0.11)


@pytest.fixture
def flagged(database: Database, plant: Any) -> Database:
    """A database with one open flag, whose clock stands at five minutes past ``NOW``."""
    with database.write() as connection:
        assert happenings.open_flag(connection, plant.unit, FLAG)
    return replace(database, clock=lambda: NOW + 300_000_000)


def trail(database: Database) -> list[tuple[str, str, str]]:
    """Actor, action and object of every entry after the revision's own."""
    return [(entry.actor, entry.action, entry.object) for entry in reader.audit_entries(database, after=1)]


def test_a_flag_is_opened_once_and_cleared_once(flagged: Database, plant: Any) -> None:
    with flagged.write() as connection:
        assert not happenings.open_flag(connection, plant.unit, FLAG)
        assert happenings.clear_flag(connection, FLAG_ID, NOW + 10, "the sums came back")
        assert not happenings.clear_flag(connection, FLAG_ID, NOW + 20, "again")
    (flag,) = reader.flags_of(flagged, plant.unit, "cleared")
    assert (flag.id, flag.group, flag.cleared_us, flag.size) == (FLAG_ID, FLAG.group, NOW + 10, 1.5)
    assert reader.flags_of(flagged, state="open") == []
    name = f"flag {FLAG_ID}"
    assert trail(flagged) == [("softsensor", "flag opened", name), ("softsensor", "flag cleared", name)]


def test_a_new_diagnosis_is_audited_and_a_new_size_is_not(flagged: Database) -> None:
    with flagged.write() as connection:
        happenings.update_flag(connection, replace(FLAG, size=1.7), NOW + 10)
        happenings.update_flag(connection, replace(FLAG, size=float("nan"), group=("TI2101A",)), NOW + 20)
    flag, comments = reader.flag_with_comments(flagged, FLAG_ID)
    assert (flag.size, flag.group, comments) == (None, ("TI2101A",), ())
    last = reader.audit_entries(flagged)[-1]
    assert [action for _, action, _ in trail(flagged)] == ["flag opened", "flag rediagnosed"]
    assert json.loads(last.before or "")["size"] == 1.7
    assert json.loads(last.after or "")["size"] is None


def test_what_was_weighed_is_kept_with_the_flag_and_covered_by_the_trail(
    database: Database, plant: Any
) -> None:
    weighed = (("TI2101A", 0.1 + 0.2), ("Feed, größer", 0.25), ("nothing", 1e-9))
    told = replace(FLAG, onset_from_us=NOW - 90_000_000, onset_to_us=NOW - 30_000_000, hypotheses=weighed)
    with database.write() as connection:
        happenings.open_flag(connection, plant.unit, told)
    (flag,) = reader.flags_of(database, plant.unit)
    assert (flag.onset_from_us, flag.onset_to_us) == (told.onset_from_us, told.onset_to_us)
    assert flag.hypotheses == weighed
    after = json.loads(reader.audit_entries(database)[-1].after or "")
    assert after["onset_from_us"] == told.onset_from_us
    assert json.loads(after["hypotheses"]) == [list(item) for item in weighed]
    assert verify(database).whole


def test_a_flag_without_them_says_nothing_of_them(flagged: Database, plant: Any) -> None:
    (flag,) = reader.flags_of(flagged, plant.unit)
    assert (flag.onset_from_us, flag.onset_to_us, flag.hypotheses) == (None, None, ())


def test_a_flag_is_acknowledged_once_with_its_entry(flagged: Database) -> None:
    changes.acknowledge_flag(flagged, FLAG_ID, "a.mueller", "seen on the round")
    changes.acknowledge_flag(flagged, FLAG_ID, "b.other", "me too")
    flag, _ = reader.flag_with_comments(flagged, FLAG_ID)
    assert (flag.acknowledged_by, flag.acknowledged_us) == ("a.mueller", NOW + 300_000_000)
    entry = reader.audit_entries(flagged)[-1]
    assert (entry.actor, entry.action, entry.reason) == (
        "a.mueller",
        "flag acknowledged",
        "seen on the round",
    )
    assert entry.time_us == NOW + 300_000_000
    assert json.loads(entry.before or "") == {"acknowledged_by": None, "acknowledged_us": None}
    assert len(trail(flagged)) == 2


def test_comments_stay_in_order_and_are_audited(flagged: Database) -> None:
    for text in ("thermowell checked", "Prüfung am 3. geplant"):
        changes.comment_flag(flagged, FLAG_ID, "a.mueller", text)
    _, comments = reader.flag_with_comments(flagged, FLAG_ID)
    assert [comment.text for comment in comments] == ["thermowell checked", "Prüfung am 3. geplant"]
    assert [action for _, action, _ in trail(flagged)] == ["flag opened"] + 2 * ["flag commented"]


def test_a_finding_replaces_the_one_before_and_both_stay_on_the_trail(flagged: Database) -> None:
    changes.set_finding(flagged, FLAG_ID, "undecided", "a.mueller", "waiting for the shop", as_found=1.4)
    changes.set_finding(flagged, FLAG_ID, "confirmed", "a.mueller", "calibrated", as_left=0.02)
    flag, _ = reader.flag_with_comments(flagged, FLAG_ID)
    assert (flag.finding, flag.as_found, flag.as_left) == ("confirmed", 1.4, 0.02)
    entry = reader.audit_entries(flagged)[-1]
    assert json.loads(entry.before or "")["finding"] == "undecided"
    assert json.loads(entry.after or "")["finding"] == "confirmed"


REFUSED: dict[str, Callable[[Database], None]] = {
    "there is no flag nothing": lambda d: changes.acknowledge_flag(d, "nothing", "a", "b"),
    "no flag gone": lambda d: changes.comment_flag(d, "gone", "a", "b"),
    "who acknowledges is missing": lambda d: changes.acknowledge_flag(d, FLAG_ID, " ", "b"),
    "text is missing": lambda d: changes.comment_flag(d, FLAG_ID, "a", ""),
    "expected one of: confirmed": lambda d: changes.set_finding(d, FLAG_ID, "true", "a", "b"),
    "a reason is missing": lambda d: changes.set_finding(d, FLAG_ID, "confirmed", "a", ""),
    "as found cannot be nan": lambda d: changes.set_finding(
        d, FLAG_ID, "confirmed", "a", "b", as_found=float("nan")
    ),
    "no laboratory result 77": lambda d: changes.decide_lab(d, 77, "use", "a", "b"),
    "expected one of: use, leave out": lambda d: changes.decide_lab(d, 1, "perhaps", "a", "b"),
}


@pytest.mark.parametrize("message", REFUSED)
def test_what_cannot_be_done_is_refused_in_words_and_leaves_no_entry(flagged: Database, message: str) -> None:
    before = trail(flagged)
    with pytest.raises(RecordsError, match=message):
        REFUSED[message](flagged)
    assert trail(flagged) == before


def test_the_same_lab_result_counts_once_and_another_value_revises_it(flagged: Database, plant: Any) -> None:
    result = LabResult("AL2101", NOW - 10, NOW, 1.31)
    with flagged.write() as connection:
        first = happenings.store_lab(connection, plant.unit, result)
        assert happenings.store_lab(connection, plant.unit, result) == first
        second = happenings.store_lab(connection, plant.unit, replace(result, reported_us=NOW + 5, value=1.4))
        with pytest.raises(RecordsError, match="nan"):
            happenings.store_lab(connection, plant.unit, replace(result, value=float("nan")))
    found = reader.lab_results_of(flagged, plant.unit)
    assert [(item.id, item.value, item.revises) for item in found] == [
        (first, 1.31, None),
        (second, 1.4, first),
    ]
    assert reader.lab_results_of(flagged, plant.unit, from_us=NOW - 9) == []
    assert reader.lab_results_of(flagged, plant.unit, to_us=NOW - 10) == []


def test_a_persons_decision_about_a_lab_result_stays(flagged: Database, plant: Any) -> None:
    with flagged.write() as connection:
        lab = happenings.store_lab(connection, plant.unit, LabResult("AL2101", NOW - 10, NOW, 2.0))
        happenings.settle_lab(connection, lab, WAITING)
    (item,) = reader.lab_results_of(flagged, plant.unit)
    assert (item.status, item.innovation, item.counted_cycle) == ("waiting for a person", 0.7, None)
    changes.decide_lab(flagged, lab, "leave out", "a.mueller", "bottle mixed up")
    with flagged.write() as connection:
        happenings.settle_lab(connection, lab, replace(WAITING, status="used", sd=float("nan")))
    (item,) = reader.lab_results_of(flagged, plant.unit)
    assert (item.status, item.reason, item.decided_by) == ("left out", "bottle mixed up", "a.mueller")
    assert item.sd is None
    assert trail(flagged)[-1] == ("a.mueller", "laboratory result decided", f"laboratory result {lab}")


def test_events_count_once_by_their_key_and_are_followed_by_id(database: Database, plant: Any) -> None:
    lost = Event(plant.unit, NOW, "connection", "the plant's server is away")
    moved = Event(None, NOW, "disturbance", "feed concentration moved", tag="TI2101A", key="moved 40")
    with database.write() as connection:
        for event in (lost, lost, moved, replace(moved, text="again")):
            happenings.record_event(connection, event)
    first, second = reader.events_since(database)
    assert (first.event, second.event) == (lost, moved)
    assert reader.events_since(database, after=first.id) == [second]
    assert reader.events_since(database, unit_id=plant.unit) == [first]
    assert reader.latest_events(database, limit=1) == [second]


def test_one_revision_is_in_service_at_a_time(database: Database, plant: Any) -> None:
    deed = Deed("a.mueller", "better gains", NOW)
    with database.write() as connection:
        set_revision_state(connection, plant.revision, "in service", deed)
        second = register_revision(connection, plant.unit, Revision("cd" * 32, "[unit]", b""), deed)
        set_revision_state(connection, second, "in service", deed)
        set_revision_state(connection, second, "in service", deed)
    states = [revision.state for revision in reader.revisions_of(database, plant.unit)]
    assert states == ["withdrawn", "in service"]
    assert [action for _, action, _ in trail(database)] == [
        "revision in service",
        "revision registered",
        "revision withdrawn",
        "revision in service",
    ]
    assert verify(database).whole


def test_an_unknown_unit_is_told_with_those_there_are(database: Database, plant: Any) -> None:
    assert reader.find_unit(database, "R-210").id == plant.unit
    with pytest.raises(RecordsError, match=r"no unit X-1; there are: R-210"):
        reader.find_unit(database, "X-1")
