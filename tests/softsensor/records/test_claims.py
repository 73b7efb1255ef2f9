"""One service a unit: a live one keeps it, a dead one's is taken over at once, and nobody writes what is another's."""

from __future__ import annotations

import os
import socket
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import text

from softsensor.errors import RecordsError
from softsensor.records.claims import claimed, require_claim
from softsensor.records.engine import Database, open_database
from softsensor.records.errors import DatabaseAwayError
from softsensor.records.plant import register_unit
from softsensor.records.series import latest_cycle
from softsensor.records.storing import store_readings
from softsensor.records.upgrade import upgrade_database

NOW = 1_796_083_200_000_000
HOLDER = """
import sys
from softsensor.records.claims import claimed
from softsensor.records.engine import open_database

with open_database(sys.argv[1]) as database, claimed(database, [1]):
    print("holding", flush=True)
    sys.stdin.read()
"""


def two_units(database: Database) -> list[int]:
    with database.write() as connection:
        return [register_unit(connection, name, name, NOW) for name in ("R-1", "R-2")]


def holders(database: Database) -> dict[int, str]:
    with database.read() as connection:
        return {row.unit_id: row.holder for row in connection.execute(text("SELECT * FROM claims"))}


def leftovers(database: Database) -> list[str]:
    """Lock files beside an SQLite database."""
    if database.engine.dialect.name != "sqlite":
        return []
    return [path.name for path in Path(str(database.url.database)).parent.glob("*-service-*")]


def test_a_live_service_keeps_all_its_units_and_gives_them_up_when_it_ends(database: Database) -> None:
    one, two = two_units(database)
    with claimed(database, [one]) as mine:
        with (
            pytest.raises(RecordsError, match="unit R-1 is served already") as refused,
            claimed(database, [two, one]),
        ):
            pytest.fail("two services hold one unit")
        (line,) = refused.value.lines
        assert f"by process {os.getpid()} on {socket.gethostname()} since 20" in line
        assert "end that service first, or give this one a database of its own" in line
        assert holders(database) == {one: mine.key}
        with claimed(database, [two]) as other:
            assert holders(database) == {one: mine.key, two: other.key}
    assert holders(database) == {}
    assert leftovers(database) == []
    with claimed(database, [one, two]) as again:
        assert set(holders(database).values()) == {again.key}


def test_a_killed_service_s_unit_is_taken_over_at_once(database: Database, database_url: str) -> None:
    one, _ = two_units(database)
    for _ in range(2):
        command = [sys.executable, "-c", HOLDER, database_url]
        with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as process:
            assert process.stdout is not None
            assert process.stdout.readline() == "holding\n"
            with (
                pytest.raises(RecordsError, match=f"by process {process.pid} on"),
                claimed(database, [one]),
            ):
                pytest.fail("a live process's unit was taken over")
            process.kill()
            process.wait()
            until_free(database, one)
    assert leftovers(database) == []


def until_free(database: Database, unit: int) -> None:
    """Claim the unit; a server needs a moment to see that the peer of a connection has died."""
    for _ in range(1000):
        try:
            with claimed(database, [unit]):
                return
        except RecordsError:
            continue
    pytest.fail("a dead process's unit stays claimed")


def test_a_service_that_lost_its_unit_writes_nothing_more(
    database: Database, put_plant: Callable[[Database], Any]
) -> None:
    plant = put_plant(database)
    with claimed(database, [plant.unit]) as mine:
        with database.write() as connection:
            store_readings(connection, plant.unit, plant.readings(0, 1), mine.key)
            connection.execute(text("UPDATE claims SET holder = 'f00', host = 'elsewhere', process = 7"))
        with (
            pytest.raises(RecordsError, match="now held by process 7 on elsewhere since"),
            database.write() as connection,
        ):
            store_readings(connection, plant.unit, plant.readings(1, 1), mine.key)
    assert latest_cycle(database, plant.unit) == 0
    assert holders(database) == {plant.unit: "f00"}
    with database.write() as connection:
        connection.execute(text("DELETE FROM claims"))
        with pytest.raises(RecordsError, match="now held by nobody"):
            require_claim(connection, plant.unit, mine.key)


def test_a_lock_is_held_again_after_the_server_was_away(postgres_server: Any) -> None:
    url = postgres_server.url.render_as_string(hide_password=False)
    upgrade_database(url)
    with open_database(url) as database:
        one, _ = two_units(database)
        with claimed(database, [one]) as mine:
            postgres_server.kill()
            with pytest.raises(DatabaseAwayError):
                mine.renew()
            postgres_server.start()
            mine.renew()
            with pytest.raises(RecordsError, match="is served already"), claimed(database, [one]):
                pytest.fail("a live service's unit was taken over")
            mine.renew()
        with claimed(database, [one]):
            assert len(holders(database)) == 1


def test_a_claim_that_cannot_be_given_up_is_taken_over(postgres_server: Any) -> None:
    url = postgres_server.url.render_as_string(hide_password=False)
    upgrade_database(url)
    with open_database(url) as database:
        one, _ = two_units(database)
        with claimed(database, [one]) as mine:
            postgres_server.kill()
        postgres_server.start()
        assert holders(database) == {one: mine.key}
        with claimed(database, [one]) as next_one:
            assert holders(database) == {one: next_one.key}
