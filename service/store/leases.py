"""Who holds a job: claim, renew, give back, end. Each is one conditional UPDATE, so that two can never win.

A claim makes a fresh token; every later step of the same attempt demands it, so that a worker which was believed dead
and is not (paused, cut off) can change nothing any more: its UPDATE finds no row, and Stale tells it so.
"""

from datetime import datetime
from typing import Any

from sqlalchemy import Connection, bindparam, func, literal, select, update
from sqlalchemy.sql.dml import ReturningUpdate

from service.store.clock import new_id
from service.store.records import Claim, Held
from service.store.tables import WAITING, State, jobs
from service.store.turns import order

RELEASED = {"token": None, "lease_until": None, "stage": None, "stage_done": None, "stage_of": None}
CLAIMED = (
    jobs.c.id,
    jobs.c.token,
    jobs.c.worker,
    jobs.c.dataset_id,
    jobs.c.plan_digest,
    jobs.c.subject,
    jobs.c.submitted_by,
    jobs.c.priority,
    jobs.c.attempts,
    jobs.c.queued_at,
    jobs.c.started_at,
)


def _claim(*, stalest: bool) -> ReturningUpdate[Any]:
    first = (
        select(jobs.c.id)
        .where(WAITING, jobs.c.run_after <= bindparam("now"))
        .order_by(*order(stalest=stalest))
        .limit(1)
        .with_for_update(skip_locked=True)
    )
    return (
        update(jobs)
        .where(jobs.c.id == first.scalar_subquery(), WAITING)
        .values(
            state=State.RUNNING,
            token=bindparam("with_token"),
            worker=bindparam("with_worker"),
            lease_until=bindparam("until"),
            started_at=bindparam("now"),
            attempts=jobs.c.attempts + 1,
        )
        .returning(*CLAIMED)
    )


# Built once: building takes as long as running.
CLAIM = {stalest: _claim(stalest=stalest) for stalest in (False, True)}
HELD = (jobs.c.id == bindparam("of_id"), jobs.c.token == bindparam("of_token"), jobs.c.state == State.RUNNING)
SUCCEED = update(jobs).where(*HELD).values(state=State.SUCCEEDED, **RELEASED)
IS_HELD = select(literal(1)).where(*HELD)


class Stale(Exception):
    """The job is no longer held under this token."""


def claim_next(
    connection: Connection, *, worker: str, now: datetime, lease_until: datetime, stalest: bool = False
) -> Claim | None:
    """Take the waiting job whose turn it is; None if none waits or their time has not come.

    `stalest` lets turns go before priorities. On PostgreSQL two claims at once skip each other's row.
    """
    by = {"with_worker": worker, "with_token": new_id(), "now": now, "until": lease_until}
    row = connection.execute(CLAIM[stalest], by).mappings().first()
    if row is None:
        return None
    values = dict(row)
    return Claim(job_id=values.pop("id"), attempt=values.pop("attempts"), **values)


def renew(
    connection: Connection, job_id: str, token: str, *, lease_until: datetime, progress: tuple[str, int, int] | None
) -> None:
    """Heartbeat: hold on, and say how far the job is (stage, done, of). Raises Stale."""
    values: dict[str, Any] = {"lease_until": lease_until}
    if progress is not None:
        values["stage"], values["stage_done"], values["stage_of"] = progress
    _held(connection, job_id, token, values)


def give_back(connection: Connection, job_id: str, token: str, *, run_after: datetime, counted: bool = True) -> None:
    """Let the job wait again, in its old turn. Not `counted`: the attempt was no fault of the job. Raises Stale."""
    values: dict[str, Any] = {"state": State.QUEUED, "run_after": run_after, **RELEASED}
    if not counted:
        values["attempts"] = jobs.c.attempts - 1
    _held(connection, job_id, token, values)


def is_held(connection: Connection, job_id: str, token: str) -> bool:
    """Whether this token still holds the job."""
    return connection.execute(IS_HELD, {"of_id": job_id, "of_token": token}).first() is not None


def cancel(connection: Connection, job_id: str, *, now: datetime) -> State | None:
    """End a job that has not ended, whoever holds it: their token is void from now on.

    Answers the state that it was in when it was cancelled; None if there was nothing to cancel.
    """
    values = {"state": State.CANCELLED, "finished_at": now, **RELEASED}
    for state in (State.QUEUED, State.RUNNING, State.QUEUED):  # it may move on between two looks, and back once
        ended = update(jobs).where(jobs.c.id == job_id, jobs.c.state == state).values(**values)
        if connection.execute(ended).rowcount == 1:
            return state
    return None


def succeed(connection: Connection, job_id: str, token: str, *, now: datetime, verdict: str, degree: int) -> None:
    """End with a result, which the caller stores in the same transaction. Raises Stale."""
    ended = {"finished_at": now, "verdict": verdict, "chosen_degree": degree}
    if connection.execute(SUCCEED, {"of_id": job_id, "of_token": token, **ended}).rowcount != 1:
        raise Stale(job_id)


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
    return connection.execute(select(func.count()).where(WAITING, jobs.c.run_after <= now)).scalar_one()


def _held(connection: Connection, job_id: str, token: str, values: dict[str, Any]) -> None:
    ended = update(jobs).where(*HELD).values(**values)
    if connection.execute(ended, {"of_id": job_id, "of_token": token}).rowcount != 1:
        raise Stale(job_id)
