"""Notifications: who is to be told of a job's end, and how far that has come. At least once, from these rows."""

from dataclasses import dataclass, fields
from datetime import datetime

from sqlalchemy import Connection, bindparam, insert, select, update

from service.store.records import NotificationRecord
from service.store.tables import FINAL, jobs, keys, notifications, verdicts

RECORD = tuple(notifications.c[one.name] for one in fields(NotificationRecord))
OF_JOB = select(*RECORD).where(notifications.c.job_id == bindparam("of_id"))


@dataclass(frozen=True, kw_only=True, slots=True)
class Due:
    """One notification to send now."""

    job_id: str
    url: str
    attempts: int
    state: str
    subject: str
    finished_at: datetime
    verdict: str | None
    error: str | None
    notify_secret: str | None


def add(connection: Connection, job_id: str, url: str) -> NotificationRecord:
    """Somebody wants to be told."""
    connection.execute(insert(notifications), {"job_id": job_id, "url": url, "state": "waiting", "attempts": 0})
    return NotificationRecord(url=url, state="waiting", attempts=0, next_at=None, last_at=None, last_answer=None)


def of_job(connection: Connection, job_id: str) -> NotificationRecord | None:
    """The notification of one job."""
    row = connection.execute(OF_JOB, {"of_id": job_id}).mappings().first()
    return None if row is None else NotificationRecord(**row)


def due(connection: Connection, now: datetime, *, limit: int) -> list[str]:
    """Jobs that have ended and whose notification waits and may be sent now."""
    query = (
        select(notifications.c.job_id)
        .join(jobs, jobs.c.id == notifications.c.job_id)
        .where(notifications.c.state == "waiting", jobs.c.state.in_(FINAL))
        .where((notifications.c.next_at.is_(None)) | (notifications.c.next_at <= now))
        .order_by(notifications.c.next_at.is_not(None), notifications.c.next_at)  # what was never tried comes first
        .limit(limit)
    )
    return list(connection.execute(query).scalars())


def take(connection: Connection, job_id: str, *, now: datetime, again_at: datetime) -> Due | None:
    """Take one for sending, so that nobody else does before `again_at`; None if somebody has."""
    n = notifications.c
    free = (n.job_id == job_id, n.state == "waiting", (n.next_at.is_(None)) | (n.next_at <= now))
    taking = update(notifications).where(*free).values(attempts=n.attempts + 1, next_at=again_at, last_at=now)
    if connection.execute(taking).rowcount != 1:
        return None
    query = (
        select(
            n.job_id,
            n.url,
            n.attempts,
            jobs.c.state,
            jobs.c.subject,
            jobs.c.finished_at,
            jobs.c.error,
            verdicts.c.document.label("verdict"),
            keys.c.notify_secret,
        )
        .join(jobs, jobs.c.id == n.job_id)
        .outerjoin(verdicts, verdicts.c.job_id == n.job_id)
        .outerjoin(keys, keys.c.name == jobs.c.submitted_by)
        .where(n.job_id == job_id)
    )
    return Due(**connection.execute(query).mappings().one())


def settle(
    connection: Connection, job_id: str, *, state: str, answer: str, next_at: datetime | None, now: datetime
) -> None:
    """Write down how sending went: `delivered`, `given_up`, or `waiting` until `next_at`."""
    values = {"state": state, "last_answer": answer, "next_at": next_at, "last_at": now}
    connection.execute(update(notifications).where(notifications.c.job_id == job_id).values(**values))
