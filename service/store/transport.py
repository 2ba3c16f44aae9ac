"""The queue's transport: job ids on their way to a worker, by huey, and nothing else.

A message is only a hint. The jobs table says what waits; a lost message is sent again by the sweep, a doubled one
finds nothing to claim. So the SQLite file of the queue need not be durable, and messages are bare ids, not pickles:
whoever can write to the queue can make a worker look for a job, and no more.
"""

import sqlite3
from typing import Any

import psycopg
from huey import Huey, PostgresHuey, SqliteHuey
from huey.registry import Message
from huey.serializer import Serializer
from sqlalchemy import make_url

from service.settings import Settings
from service.store.database import BUSY_SECONDS, prepare_directory

FILE_NAME = "queue.db"
TASK = "leastbend.run"  # named apart from the module that defines it, which changes when run as __main__


class JobIds(Serializer):  # type: ignore[misc]  # huey has no types
    """Messages are the job id in ASCII."""

    def _serialize(self, data: Message) -> bytes:
        return str(data.args[0]).encode("ascii")

    def _deserialize(self, data: Any) -> Message:
        job_id = bytes(data).decode("ascii", "replace")
        return Message(id=job_id, name=TASK, args=(job_id,), kwargs={})


class _Delivery:
    """What of huey is not used costs queries for each job: revoking is the jobs table's business."""

    def is_revoked(self, *_args: Any, **_kwargs: Any) -> bool:
        return False

    def delete(self, _key: str) -> bool:
        return False


class _SqliteDelivery(_Delivery, SqliteHuey):  # type: ignore[misc]
    pass


class _PostgresDelivery(_Delivery, PostgresHuey):  # type: ignore[misc]
    pass


class Transport:
    """Sends job ids; `huey` is what a consumer of them is built on."""

    def __init__(self, huey: Huey) -> None:
        self.huey = huey

    def send(self, job_id: str, priority: int) -> bool:
        """Hand one id over. False if the queue cannot take it now: the sweep will send it again."""
        try:
            self.huey.storage.enqueue(job_id.encode("ascii"), priority)
        except (sqlite3.Error, psycopg.Error, OSError):
            return False
        return True

    def size(self) -> int | None:
        """Messages on their way, or None if the queue cannot be asked."""
        try:
            return int(self.huey.storage.queue_size())
        except (sqlite3.Error, psycopg.Error, OSError):
            return None

    def close(self) -> None:
        """Give back the connection."""
        self.huey.storage.close()


def open_transport(settings: Settings) -> Transport:
    """The queue of this installation: a file beside the data, or tables of the same PostgreSQL."""
    common: dict[str, Any] = {"results": False, "utc": True, "serializer": JobIds()}
    if settings.database_url is None:
        path = prepare_directory(settings.data_dir) / FILE_NAME
        return Transport(_SqliteDelivery("leastbend", filename=str(path), fsync=False, timeout=BUSY_SECONDS, **common))
    url = make_url(settings.database_url).set(drivername="postgresql")
    dsn = url.render_as_string(hide_password=False)
    return Transport(_PostgresDelivery("leastbend", dsn=dsn, table_prefix="leastbend_queue", **common))
