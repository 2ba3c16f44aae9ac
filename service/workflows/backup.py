"""Online backup of an embedded installation."""

import sqlite3
from dataclasses import dataclass
from pathlib import Path

from service.errors import Conflict, Unusable
from service.settings import Settings
from service.store.backup import copy_sqlite
from service.store.database import FILE_NAME


@dataclass(frozen=True, kw_only=True, slots=True)
class BackedUp:
    """The copy and its size in bytes."""

    path: Path
    size: int


def back_up(settings: Settings, destination: Path) -> BackedUp:
    """Copy the database to a new file while the service runs. To restore: stop, put it in place of the database.

    Raises Conflict if the file is there already, Unusable if there is nothing to copy or no room for the copy.
    """
    if settings.postgres:
        raise Unusable("data on PostgreSQL are backed up with PostgreSQL's own tools (pg_dump, pg_basebackup)")
    source = settings.data_dir.absolute() / FILE_NAME
    if not source.is_file():
        raise Unusable(f"there is no {FILE_NAME} in {settings.data_dir.absolute()}")
    target = destination.absolute()
    if target.exists():
        raise Conflict(f"{target} is there already; a backup never overwrites", code="file_exists")
    try:
        copy_sqlite(source, target)
    except FileExistsError as error:
        raise Conflict(f"{target} is there already; a backup never overwrites", code="file_exists") from error
    except (sqlite3.Error, OSError) as error:
        raise Unusable(f"cannot write the backup {target}: {error}; nothing was left behind") from error
    return BackedUp(path=target, size=target.stat().st_size)
