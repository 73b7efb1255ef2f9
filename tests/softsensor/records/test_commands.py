"""``softsensor db upgrade`` and ``softsensor audit verify``: what they print and their exit status."""

from __future__ import annotations

import json

import pytest
from sqlalchemy import text
from typer.testing import CliRunner

from softsensor.cli import audit, db
from softsensor.errors import RecordsError
from softsensor.records.audit import Entry, append
from softsensor.records.engine import open_database

RUNNER = CliRunner()


def fill(url: str) -> None:
    with open_database(url) as database, database.write() as connection:
        for number in range(4):
            append(connection, Entry(number, "someone", "act", str(number)))


def tamper(url: str) -> None:
    with open_database(url) as database, database.write() as connection:
        if connection.dialect.name == "sqlite":
            connection.execute(text("DROP TRIGGER audit_trail_no_update"))
        else:
            connection.execute(text("DROP TRIGGER audit_trail_no_update ON audit_trail"))
        connection.execute(text("UPDATE audit_trail SET actor = 'nobody' WHERE sequence = 3"))


def test_upgrade_says_what_it_applied(empty_database_url: str) -> None:
    first = RUNNER.invoke(db.app, ["upgrade", "--database", empty_database_url])
    assert (first.exit_code, first.stdout) == (0, "applied: 0001, 0002, 0003, 0004, 0005\n")
    again = RUNNER.invoke(db.app, ["upgrade", "--database", empty_database_url])
    assert (again.exit_code, again.stdout) == (0, "the database is up to date\n")
    as_json = RUNNER.invoke(db.app, ["upgrade", "--database", empty_database_url, "--json"])
    assert (as_json.exit_code, json.loads(as_json.stdout)) == (0, {"applied": []})


def test_verify_of_a_whole_trail_is_0(database_url: str) -> None:
    fill(database_url)
    plain = RUNNER.invoke(audit.app, ["verify", "--database", database_url])
    assert plain.exit_code == 0
    assert plain.stdout.startswith("the audit trail is whole: 4 entries, head ")
    as_json = RUNNER.invoke(audit.app, ["verify", "--database", database_url, "--json"])
    report = json.loads(as_json.stdout)
    assert as_json.exit_code == 0
    assert (report["whole"], report["entries"], report["first_broken"]) == (True, 4, None)
    assert report["head"] in plain.stdout
    kept = RUNNER.invoke(
        audit.app, ["verify", "--database", database_url, "--expect-head", report["head"].upper()]
    )
    assert kept.exit_code == 0


def test_verify_of_a_broken_trail_is_1_and_says_where(database_url: str) -> None:
    fill(database_url)
    tamper(database_url)
    plain = RUNNER.invoke(audit.app, ["verify", "--database", database_url])
    assert plain.exit_code == 1
    assert "broken at entry 3: entry 3 is not as it was written" in plain.stdout
    assert "triggers that refuse changes are not all in place" in plain.stdout
    as_json = RUNNER.invoke(audit.app, ["verify", "--database", database_url, "--json"])
    assert as_json.exit_code == 1
    assert json.loads(as_json.stdout)["first_broken"] == 3


def test_verify_without_the_expected_head_is_1(database_url: str) -> None:
    fill(database_url)
    other = RUNNER.invoke(audit.app, ["verify", "--database", database_url, "--expect-head", "ab" * 32])
    assert other.exit_code == 1
    assert "the expected head is not on this trail" in other.stdout


@pytest.mark.parametrize("arguments", [[], ["--expect-head", "abc"]])
def test_bad_input_is_a_problem_for_the_one_place_that_prints(
    empty_database_url: str, arguments: list[str]
) -> None:
    result = RUNNER.invoke(audit.app, ["verify", "--database", empty_database_url, *arguments])
    assert isinstance(result.exception, RecordsError)
    expected = "64 hexadecimal digits" if arguments else "softsensor db upgrade --database"
    assert expected in str(result.exception)
    assert result.stdout == ""


def test_a_missing_address_is_2() -> None:
    for app, command in ((db.app, "upgrade"), (audit.app, "verify")):
        assert RUNNER.invoke(app, [command]).exit_code == 2
