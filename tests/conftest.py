"""What tests of several rooms share: databases of both kinds, and a PostgreSQL server of their own.

The server: the address in SOFTSENSOR_TEST_POSTGRES (an account that may create databases), else the
system's server programs, run as an unprivileged user on a Unix socket in a temporary folder. Without either
the tests that need it are skipped with the reason; with CI=true they fail.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from uuid import uuid4

import psycopg
import pytest
from psycopg import sql
from sqlalchemy.engine import URL, make_url

from softsensor.records.engine import Database, open_database
from softsensor.records.upgrade import upgrade_database

ACCOUNTS = ("postgres", "nobody")
"""Under which the server runs when the tests run as root, whom it refuses."""


class PostgresServer:
    """A server of our own in a temporary folder, reached on a Unix socket only."""

    def __init__(self, programs: Path) -> None:
        self._programs = programs
        self._identity = identity_of_server()
        self.folder = Path(tempfile.mkdtemp(prefix="softsensor-pg-"))
        if self._identity:
            os.chown(self.folder, self._identity["user"], self._identity["group"])

    @property
    def url(self) -> URL:
        """The address of the server's first database."""
        query = {"host": str(self.folder)}
        return URL.create("postgresql+psycopg", "softsensor", database="postgres", query=query)

    def start(self) -> None:
        """Start the server, made the first time, and wait until it takes connections."""
        if not (self.folder / "data").exists():
            self._run("initdb", "-D", "data", "-U", "softsensor", "-A", "trust", "-E", "UTF8", "--no-sync")
        options = f"-c listen_addresses= -c unix_socket_directories={self.folder} -c fsync=off"
        self._run("pg_ctl", "-D", "data", "-l", "server.log", "-o", options, "-w", "start")

    def kill(self) -> None:
        """End the server without an orderly shutdown, by the pid in its folder, and wait until it is gone."""
        self._run("pg_ctl", "-D", "data", "-m", "immediate", "-w", "stop")

    def remove(self) -> None:
        """End the server if it runs, and leave nothing behind."""
        if (self.folder / "data" / "postmaster.pid").exists():
            self.kill()
        shutil.rmtree(self.folder)

    def _run(self, program: str, *arguments: str) -> None:
        log = self.folder / f"{program}.log"
        with log.open("wb") as output:
            ended = subprocess.run(
                [str(self._programs / program), *arguments],
                cwd=self.folder,
                stdin=subprocess.DEVNULL,
                stdout=output,
                stderr=output,
                timeout=120,
                check=False,
                **self._identity,
            )
        if ended.returncode:
            raise RuntimeError(f"{program} ended with {ended.returncode}: {log.read_text(errors='replace')}")


def identity_of_server() -> dict[str, Any]:
    """As whom the server's programs run: nothing to say unless the tests run as root."""
    if not hasattr(os, "geteuid") or os.geteuid() != 0:
        return {}
    import pwd

    known = {account.pw_name: account for account in pwd.getpwall()}
    account = next(known[name] for name in ACCOUNTS if name in known)
    return {"user": account.pw_uid, "group": account.pw_gid, "extra_groups": []}


def server_programs() -> Path | None:
    """The folder with the programs of the newest server installed, if any."""
    folders = sorted(Path("/usr/lib/postgresql").glob("*/bin"), key=lambda path: float(path.parent.name))
    found = shutil.which("initdb")
    if found is not None:
        folders.append(Path(found).resolve().parent)
    usable = [folder for folder in folders if all((folder / name).exists() for name in ("initdb", "pg_ctl"))]
    return usable[-1] if usable else None


def own_server() -> Iterator[PostgresServer]:
    """A running server of our own, removed afterwards; skips, or with CI=true fails, without one."""
    programs = server_programs()
    if programs is None:
        reason = "no PostgreSQL: set SOFTSENSOR_TEST_POSTGRES or install the server"
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)
    server = PostgresServer(programs)
    try:
        server.start()
        yield server
    finally:
        server.remove()


@pytest.fixture(scope="session")
def postgres_url() -> Iterator[URL]:
    """The address of a PostgreSQL server on which databases may be made."""
    given = os.environ.get("SOFTSENSOR_TEST_POSTGRES")
    if given:
        yield make_url(given).set(drivername="postgresql+psycopg")
        return
    for server in own_server():
        yield server.url


@pytest.fixture
def postgres_server() -> Iterator[PostgresServer]:
    """A PostgreSQL server for one test, to be killed and started again."""
    yield from own_server()


def make_database(server: URL, template: str = "template1") -> URL:
    """A new database on the server, a copy of another one there."""
    name = f"test_{uuid4().hex}"
    statement = sql.SQL("CREATE DATABASE {} TEMPLATE {}")
    run_on(server, statement.format(sql.Identifier(name), sql.Identifier(template)))
    return server.set(database=name)


def drop_database(made: URL, server: URL) -> None:
    """Take a database off the server, whoever is still connected."""
    run_on(server, sql.SQL("DROP DATABASE {} WITH (FORCE)").format(sql.Identifier(str(made.database))))


def run_on(server: URL, statement: sql.Composed) -> None:
    """Run one statement outside a transaction."""
    admin = server.set(drivername="postgresql").render_as_string(hide_password=False)
    with psycopg.connect(admin, autocommit=True) as connection:
        connection.execute(statement)


@pytest.fixture(scope="session")
def upgraded_template(postgres_url: URL) -> Iterator[str]:
    """The name of a PostgreSQL database at this release's revision, to be copied."""
    made = make_database(postgres_url)
    upgrade_database(made.render_as_string(hide_password=False))
    yield str(made.database)
    drop_database(made, postgres_url)


@pytest.fixture(params=["sqlite", "postgresql"])
def empty_database_url(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    """The address of a new database that holds nothing, of each kind in turn."""
    if request.param == "sqlite":
        yield f"sqlite:///{(tmp_path / 'records.db').as_posix()}"
        return
    server: URL = request.getfixturevalue("postgres_url")
    made = make_database(server)
    yield made.render_as_string(hide_password=False)
    drop_database(made, server)


@pytest.fixture(params=["sqlite", "postgresql"])
def database_url(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    """The address of a new database at this release's revision, of each kind in turn."""
    if request.param == "sqlite":
        url = f"sqlite:///{(tmp_path / 'records.db').as_posix()}"
        upgrade_database(url)
        yield url
        return
    server: URL = request.getfixturevalue("postgres_url")
    made = make_database(server, request.getfixturevalue("upgraded_template"))
    yield made.render_as_string(hide_password=False)
    drop_database(made, server)


@pytest.fixture
def database(database_url: str) -> Iterator[Database]:
    """A new database, open, of each kind in turn."""
    with open_database(database_url) as opened:
        yield opened
