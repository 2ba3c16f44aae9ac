"""A copy of the SQLite file while it is in use, by SQLite's own backup: one moment of it, whole."""

import os
import sqlite3
from contextlib import closing
from pathlib import Path


def copy_sqlite(source: Path, destination: Path) -> None:
    """Readers and writers go on meanwhile. The copy appears under its name only once it is complete and checked.

    Raises sqlite3.Error or OSError, and then leaves nothing behind.
    """
    unfinished = destination.with_name(f".{destination.name}.unfinished")
    unfinished.unlink(missing_ok=True)
    os.close(os.open(unfinished, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o600))  # it holds measurements
    try:
        with (
            closing(sqlite3.connect(f"{source.as_uri()}?mode=ro", uri=True)) as old,
            closing(sqlite3.connect(unfinished)) as new,
        ):
            old.backup(new)
            new.execute("PRAGMA journal_mode=DELETE")  # one file, nothing beside it
            (found,) = new.execute("PRAGMA integrity_check").fetchone()
            if found != "ok":
                raise sqlite3.DatabaseError(found)
        with unfinished.open("rb") as file:
            os.fsync(file.fileno())
        os.link(unfinished, destination)  # unlike a rename, never over a file that is there
    finally:
        unfinished.unlink(missing_ok=True)
