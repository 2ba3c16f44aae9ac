"""What the commands share: settings from options, a migrated database for the time of one command."""

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from pydantic import ValidationError
from sqlalchemy.exc import DBAPIError

from service.errors import Unusable
from service.settings import PREFIX, Settings
from service.store.database import FILE_NAME, Database, open_database
from service.store.migrate import current_revision, migrate


def settings_of(asked: dict[str, Any]) -> Settings:
    """Settings from the environment, with the options that were given on top. Raises Unusable."""
    try:
        return Settings(**{name: value for name, value in asked.items() if value is not None})
    except ValidationError as error:
        first = error.errors()[0]
        name = "_".join(str(part) for part in first["loc"])
        raise Unusable(f"setting {PREFIX}{name.upper()}: {first['msg'].removeprefix('Value error, ')}") from error


def migrate_now(settings: Settings) -> tuple[str | None, str]:
    """Before anything else touches the database; the revision before and after."""
    database = open_database(settings, durable=True)
    try:
        return migrate(database)
    finally:
        database.close()


@contextmanager
def opened(settings: Settings, *, make: bool = False) -> Iterator[Database]:
    """The database at this version's revision, for the time of one command.

    Without `make` it must be there: a mistyped directory is an error, not a new and empty installation in which
    nothing is wrong. Raises Unusable, and then no installation was made.
    """
    if not make:
        _demand_installation(settings)
    migrate_now(settings)
    database = open_database(settings, durable=True)
    try:
        yield database
    finally:
        database.close()


def _demand_installation(settings: Settings) -> None:
    directory = settings.data_dir.absolute()
    if not settings.postgres and not (directory / FILE_NAME).is_file():
        raise Unusable(f"there is no {FILE_NAME} in {directory}")
    database = open_database(settings, durable=True)
    try:
        with database.read() as connection:
            revision = current_revision(connection)
    except DBAPIError as error:
        raise Unusable(f"the database cannot be read: {error.orig}") from error
    finally:
        database.close()
    if revision is None:
        raise Unusable("the database is empty: `leastbend migrate` or `leastbend serve` makes an installation of it")
