"""What happened to a job, in order; never changed afterwards, removed only by retention."""

import json
from collections.abc import Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, insert, select

from service.store.records import EventRecord
from service.store.tables import job_events

ADD = insert(job_events)


def add(connection: Connection, job_id: str, kind: str, now: datetime, **detail: Any) -> None:
    """One event: `queued`, `started`, `requeued`, `succeeded`, `failed` or `cancelled`, with what is known of it.

    Retention puts `purged` in the place of all that it removes.
    """
    connection.execute(ADD, {"job_id": job_id, "at": now, "kind": kind, "detail": json.dumps(detail)})


def add_queued(connection: Connection, job_ids: Sequence[str], now: datetime, *, submitted_by: str) -> None:
    """The first event of many jobs at once."""
    detail = json.dumps({"submitted_by": submitted_by})
    rows = [{"job_id": job_id, "at": now, "kind": "queued", "detail": detail} for job_id in job_ids]
    connection.execute(ADD, rows)


def of_job(connection: Connection, job_id: str) -> list[tuple[str, datetime, dict[str, Any]]]:
    """Kind, time and detail of every event of one job, oldest first."""
    query = select(job_events).where(job_events.c.job_id == job_id).order_by(job_events.c.id)
    return [(row.kind, row.at, json.loads(row.detail)) for row in connection.execute(query)]


def since(connection: Connection, job_id: str, after: int) -> list[EventRecord]:
    """Events of one job behind the one with id `after`, oldest first."""
    query = select(job_events).where(job_events.c.job_id == job_id, job_events.c.id > after).order_by(job_events.c.id)
    return [
        EventRecord(id=row.id, kind=row.kind, at=row.at, detail=json.loads(row.detail))
        for row in connection.execute(query)
    ]
