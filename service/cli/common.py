"""What the commands share: settings from options, a migrated database for the time of one command."""

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from pydantic import ValidationError

from service.errors import Unusable
from service.settings import PREFIX, Settings
from service.store.database import Database, open_database
from service.store.migrate import migrate


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
def opened(settings: Settings) -> Iterator[Database]:
    """The database at this version's revision, for the time of one command."""
    migrate_now(settings)
    database = open_database(settings, durable=True)
    try:
        yield database
    finally:
        database.close()
