"""Bring the database to the revision that this code knows; refuse one that is newer.

All of it happens in one transaction that holds a lock from the start (SQLite: BEGIN IMMEDIATE; PostgreSQL: an advisory
lock), so of two processes starting at once one migrates and the other finds it done.
"""

from importlib.resources import files
from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import Connection, text

from service.errors import Unusable
from service.store.database import Database

ADVISORY_LOCK = 0x1EA57BE4D  # any fixed number


def resources(name: str) -> Path:
    """Directory of the repository's top level: inside the package when installed from a wheel, else beside it."""
    package = Path(str(files("service")))
    installed = package / f"_{name}"
    return installed if installed.is_dir() else package.parent / name


def migrate(database: Database) -> tuple[str | None, str]:
    """Upgrade to the newest revision; answers (revision before, revision after)."""
    config = _config()
    newest = _newest(config)
    with database.write() as connection:
        if database.postgres:
            connection.execute(text("SELECT pg_advisory_xact_lock(:key)"), {"key": ADVISORY_LOCK})
        before = current_revision(connection)
        _refuse_newer(config, before)
        if before != newest:
            config.attributes["connection"] = connection
            command.upgrade(config, "head")
    return before, newest


def is_current(database: Database) -> bool:
    """Whether the database is at the revision that this code knows."""
    with database.read() as connection:
        return current_revision(connection) == _newest(_config())


def current_revision(connection: Connection) -> str | None:
    """Revision that the database says it is at; None if it is empty."""
    return MigrationContext.configure(connection).get_current_revision()


def _config() -> Config:
    config = Config()
    config.set_main_option("script_location", str(resources("migrations")).replace("%", "%%"))
    return config


def _newest(config: Config) -> str:
    head = ScriptDirectory.from_config(config).get_current_head()
    if head is None:
        raise Unusable("the migrations that belong to this program are missing; install it again")
    return head


def _refuse_newer(config: Config, revision: str | None) -> None:
    known = {script.revision for script in ScriptDirectory.from_config(config).walk_revisions()}
    if revision is not None and revision not in known:
        raise Unusable(
            f"the database is at revision {revision}, which this version of Leastbend does not know: it was made by a"
            " newer version. Install that version or a later one; nothing was changed.",
            code="database_too_new",
        )
