"""The queue's transport, by huey: messages on their way to a worker, and nothing else.

A message is only a hint that some job may run. The jobs table says which; a lost message is sent again by the sweep, a
doubled one finds nothing to claim. So the SQLite file of the queue need not be durable, and messages are bare ids, not
pickles: whoever can write to the queue can make a worker look for work, and no more.
"""

import sqlite3
from typing import Any

import psycopg
from huey import Huey, PostgresHuey, SqliteHuey
from psycopg.conninfo import make_conninfo
from sqlalchemy import make_url

from service.errors import Unusable
from service.settings import Settings
from service.store.database import BUSY_SECONDS, postgres_options, prepare_directory

FILE_NAME = "queue.db"
HUEY: dict[str, Any] = {"results": False, "utc": True}
ADVISORY_LOCK = 0x1EA57BE4E  # any fixed number but that of the migrations
FAILURES = (sqlite3.Error, psycopg.Error, OSError)


class QueueAway(Exception):
    """The queue cannot be read now."""


class Transport:
    """Sends and receives; `huey` is what a consumer is built on."""

    def __init__(self, huey: Huey) -> None:
        self.huey = huey

    def send(self, job_id: str, priority: int) -> bool:
        """Say that this job may run. False if the queue cannot take it now: the sweep will send it again."""
        try:
            self.huey.storage.enqueue(job_id.encode("ascii"), priority)
        except FAILURES:
            return False
        return True

    def receive(self) -> bool:
        """Take one message off. On PostgreSQL waits up to a second for one. Raises QueueAway."""
        try:
            return self.huey.storage.dequeue() is not None
        except FAILURES as error:
            raise QueueAway(str(error)) from error

    @property
    def waits(self) -> bool:
        """Whether `receive` waits for a message."""
        return bool(self.huey.storage.blocking)

    def size(self) -> int | None:
        """Messages on their way, or None if the queue cannot be asked."""
        try:
            return int(self.huey.storage.queue_size())
        except FAILURES:
            return None

    def close(self) -> None:
        """Give back the connection."""
        self.huey.storage.close()


def open_transport(settings: Settings) -> Transport:
    """The queue of this installation: a file beside the data, or tables of the same PostgreSQL. Raises Unusable."""
    try:
        return _sqlite(settings) if settings.database_url is None else _postgres(settings.database_url)
    except FAILURES as error:
        raise Unusable(f"the queue cannot be opened: {error}") from error


def _sqlite(settings: Settings) -> Transport:
    path = prepare_directory(settings.data_dir) / FILE_NAME
    try:
        return Transport(SqliteHuey("leastbend", filename=str(path), fsync=False, timeout=BUSY_SECONDS, **HUEY))
    except sqlite3.OperationalError:
        raise
    except sqlite3.DatabaseError:  # damaged; it holds nothing but hints
        for part in path.parent.glob(f"{FILE_NAME}*"):
            part.unlink()
        return Transport(SqliteHuey("leastbend", filename=str(path), fsync=False, timeout=BUSY_SECONDS, **HUEY))


def _postgres(address: str) -> Transport:
    url = make_url(address).set(drivername="postgresql").render_as_string(hide_password=False)
    dsn = make_conninfo(url, **postgres_options(address, durable=False))
    with psycopg.connect(dsn) as connection:  # of two processes that start at once, one makes the tables
        connection.execute("SELECT pg_advisory_xact_lock(%s)", (ADVISORY_LOCK,))
        return Transport(PostgresHuey("leastbend", dsn=dsn, table_prefix="leastbend_queue", **HUEY))
