"""Making and migrating a database with the migrations that are installed beside this package."""

from __future__ import annotations

from importlib import resources

from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import Connection

from softsensor.errors import RecordsError
from softsensor.records.engine import Database, connect_database


def _config() -> Config:
    """Alembic's settings; no alembic.ini, so that an installed wheel needs none."""
    config = Config()
    config.set_main_option("script_location", str(resources.files("migrations")).replace("%", "%%"))
    config.set_main_option("path_separator", "os")
    return config


def _known_revisions() -> list[str]:
    """This release's revisions, oldest first."""
    script = ScriptDirectory.from_config(_config())
    return [revision.revision for revision in script.walk_revisions()][::-1]


def _present_revision(connection: Connection) -> str | None:
    """The revision that the database is at; None for a database that holds nothing of ours."""
    return MigrationContext.configure(connection).get_current_revision()


def _refuse_newer(database: Database, present: str | None, known: list[str]) -> None:
    if present is not None and present not in known:
        raise RecordsError(
            f"the database {database.name} is at revision {present}, this release knows up to {known[-1]}: "
            "it is from a newer release; install that release, or use another database"
        )


def require_current(database: Database) -> None:
    """Check that the database is at this release's newest revision.

    :raises RecordsError: it is from a newer release, or not upgraded yet; says both revisions and what to do.
    """
    known = _known_revisions()
    with database.read() as connection:
        present = _present_revision(connection)
    _refuse_newer(database, present, known)
    if present != known[-1]:
        state = "holds no records yet" if present is None else f"is at revision {present}"
        raise RecordsError(
            f"the database {database.name} {state}, this release needs {known[-1]}; "
            f"run: softsensor db upgrade --database {database.name}"
        )


def upgrade_database(url: str) -> list[str]:
    """Make or migrate the database, all of it or nothing, and say which revisions were applied, oldest first.

    :raises RecordsError: a bad address, a database that cannot be reached, or one from a newer release.
    """
    known = _known_revisions()
    with connect_database(url) as database:
        with database.read() as connection:
            _refuse_newer(database, _present_revision(connection), known)
        with database.write() as connection:
            present = _present_revision(connection)
            _refuse_newer(database, present, known)
            config = _config()
            config.attributes["connection"] = connection
            command.upgrade(config, "head")
    return known[known.index(present) + 1 :] if present is not None else known
