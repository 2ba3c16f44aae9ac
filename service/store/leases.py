"""Who holds a job: claim, renew, give back, end. Each is one conditional UPDATE, so that two can never win.

A claim makes a fresh token; every later step of the same attempt demands it, so that a worker which was believed dead
and is not (paused, cut off) can change nothing any more: its UPDATE finds no row, and Stale tells it so.
"""

from collections.abc import Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, and_, func, or_, select, update

from service.store.clock import new_id
from service.store.records import Claim, Held
from service.store.tables import State, jobs

RELEASED = {"token": None, "lease_until": None, "stage": None, "stage_done": None, "stage_of": None}


class Stale(Exception):
    """The job is no longer held under this token."""


def claim(connection: Connection, job_id: str, *, worker: str, now: datetime, lease_until: datetime) -> Claim | None:
    """Take a waiting job whose time has come; None if there is nothing to take."""
    token = new_id()
    taken = (
        update(jobs)
        .where(jobs.c.id == job_id, jobs.c.state == State.QUEUED, jobs.c.run_after <= now)
        .values(
            state=State.RUNNING,
            token=token,
            worker=worker,
            lease_until=lease_until,
            started_at=now,
            attempts=jobs.c.attempts + 1,
        )
        .returning(
            jobs.c.dataset_id,
            jobs.c.plan_digest,
            jobs.c.subject,
            jobs.c.submitted_by,
            jobs.c.priority,
            jobs.c.attempts,
            jobs.c.queued_at,
        )
    )
    row = connection.execute(taken).mappings().first()
    if row is None:
        return None
    values = dict(row)
    attempt = values.pop("attempts")
    return Claim(job_id=job_id, token=token, attempt=attempt, started_at=now, **values)


def renew(
    connection: Connection, job_id: str, token: str, *, lease_until: datetime, progress: tuple[str, int, int] | None
) -> None:
    """Heartbeat: hold on, and say how far the job is (stage, done, of). Raises Stale."""
    values: dict[str, Any] = {"lease_until": lease_until}
    if progress is not None:
        values["stage"], values["stage_done"], values["stage_of"] = progress
    _held(connection, job_id, token, values)


def give_back(connection: Connection, job_id: str, token: str, *, run_after: datetime) -> None:
    """Let the job wait again. Raises Stale."""
    _held(connection, job_id, token, {"state": State.QUEUED, "run_after": run_after, **RELEASED})


def succeed(connection: Connection, job_id: str, token: str, *, now: datetime, verdict: str, degree: int) -> None:
    """End with a result, which the caller stores in the same transaction. Raises Stale."""
    values = {"state": State.SUCCEEDED, "finished_at": now, "verdict": verdict, "chosen_degree": degree, **RELEASED}
    _held(connection, job_id, token, values)


def fail(connection: Connection, job_id: str, token: str, *, now: datetime, error: str) -> None:
    """End with an error (JSON). Raises Stale."""
    _held(connection, job_id, token, {"state": State.FAILED, "finished_at": now, "error": error, **RELEASED})


def running(connection: Connection) -> list[Held]:
    """Every job in some worker's hands."""
    query = select(
        jobs.c.id,
        jobs.c.token,
        jobs.c.worker,
        jobs.c.attempts,
        jobs.c.priority,
        jobs.c.started_at,
        jobs.c.lease_until,
    ).where(jobs.c.state == State.RUNNING)
    return [Held(**row) for row in connection.execute(query).mappings()]


def due(connection: Connection, now: datetime) -> int:
    """How many jobs wait and may run now."""
    query = select(func.count()).where(jobs.c.state == State.QUEUED, jobs.c.run_after <= now)
    return connection.execute(query).scalar_one()


def undelivered(
    connection: Connection, *, now: datetime, sent_before: datetime | None, limit: int
) -> list[tuple[str, int]]:
    """Waiting jobs to hand to the queue: their time has come since they were last sent, or, with `sent_before`,
    they were sent before that moment and still wait. Id and priority, most urgent first."""
    lost = jobs.c.dispatched_at < jobs.c.run_after
    if sent_before is not None:
        lost = or_(lost, jobs.c.dispatched_at < sent_before)
    query = (
        select(jobs.c.id, jobs.c.priority)
        .where(and_(jobs.c.state == State.QUEUED, jobs.c.run_after <= now, lost))
        .order_by(jobs.c.priority.desc(), jobs.c.id)
        .limit(limit)
    )
    return [(row.id, row.priority) for row in connection.execute(query)]


def mark_sent(connection: Connection, ids: Sequence[str], now: datetime) -> None:
    """Remember that these ids went to the queue."""
    connection.execute(update(jobs).where(jobs.c.id.in_(ids)).values(dispatched_at=now))


def _held(connection: Connection, job_id: str, token: str, values: dict[str, Any]) -> None:
    held = (jobs.c.id == job_id, jobs.c.token == token, jobs.c.state == State.RUNNING)
    if connection.execute(update(jobs).where(*held).values(**values)).rowcount != 1:
        raise Stale(job_id)
