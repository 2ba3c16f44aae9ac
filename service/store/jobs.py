"""Jobs as callers see them: putting one in, reading one or many."""

from dataclasses import dataclass, fields
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, RowMapping, Select, func, insert, literal, select

from service.store.records import JobDetail, JobFilter, JobRecord, Page
from service.store.tables import WAITING, State, jobs, plans, results
from service.store.turns import next_turn

RECORD = tuple(jobs.c[one.name] for one in fields(JobRecord))


def waiting(connection: Connection, *, at_most: int) -> int:
    """Number of jobs that wait, counted no further than `at_most`."""
    some = select(literal(1)).where(WAITING).limit(at_most).subquery()
    return connection.execute(select(func.count()).select_from(some)).scalar_one()


def add(
    connection: Connection,
    *,
    job_id: str,
    dataset_id: str,
    plan_digest: str,
    subject: str,
    submitted_by: str,
    priority: int,
    now: datetime,
) -> None:
    """A new job, waiting; the caller hands its id to the queue after the commit."""
    row = {
        "id": job_id,
        "state": State.QUEUED,
        "dataset_id": dataset_id,
        "plan_digest": plan_digest,
        "subject": subject,
        "submitted_by": submitted_by,
        "priority": priority,
        "turn": next_turn(submitted_by, priority),
        "queued_at": now,
        "run_after": now,
        "attempts": 0,
    }
    connection.execute(insert(jobs).values(row))


def find(connection: Connection, job_id: str) -> JobRecord | None:
    """The row of one job."""
    row = connection.execute(select(*RECORD).where(jobs.c.id == job_id)).mappings().first()
    return None if row is None else _record(row)


def detail(connection: Connection, job_id: str) -> JobDetail | None:
    """One job with its plan and, once it succeeded, its result and provenance."""
    query = (
        select(*RECORD, plans.c.document.label("plan"), results.c.document.label("result"), results.c.provenance)
        .join(plans, plans.c.digest == jobs.c.plan_digest)
        .outerjoin(results, results.c.job_id == jobs.c.id)
        .where(jobs.c.id == job_id)
    )
    row = connection.execute(query).mappings().first()
    if row is None:
        return None
    return JobDetail(job=_record(row), plan=row["plan"], result=row["result"], provenance=row["provenance"])


def newest(connection: Connection, wanted: JobFilter, *, before: str | None, limit: int) -> Page[JobRecord]:
    """Jobs that match, newest first."""
    query = _matching(select(*RECORD), wanted).order_by(jobs.c.id.desc()).limit(limit + 1)
    if before is not None:
        query = query.where(jobs.c.id < before)
    rows = [_record(row) for row in connection.execute(query).mappings()]
    return Page(items=tuple(rows[:limit]), after=rows[limit - 1].id if len(rows) > limit else None)


@dataclass(frozen=True, slots=True)
class Standing:
    """Where a job stands; what those who watch it are told changes of."""

    id: str
    state: State
    attempts: int
    stage: str | None
    stage_done: int | None


def standings(connection: Connection, ids: list[str]) -> list[Standing]:
    """Where these jobs stand: one query, however many callers watch."""
    j = jobs.c
    query = select(j.id, j.state, j.attempts, j.stage, j.stage_done).where(j.id.in_(ids))
    return [
        Standing(row.id, State(row.state), row.attempts, row.stage, row.stage_done) for row in connection.execute(query)
    ]


def _matching(query: Select[Any], wanted: JobFilter) -> Select[Any]:
    for column, value in (
        (jobs.c.subject, wanted.subject),
        (jobs.c.state, wanted.state),
        (jobs.c.verdict, wanted.verdict),
        (jobs.c.submitted_by, wanted.submitted_by),
        (jobs.c.plan_digest, wanted.plan_digest),
    ):
        if value is not None:
            query = query.where(column == value)
    if wanted.since is not None:
        query = query.where(jobs.c.queued_at >= wanted.since)
    if wanted.until is not None:
        query = query.where(jobs.c.queued_at < wanted.until)
    return query


def _record(row: RowMapping) -> JobRecord:
    values = {column.name: row[column.name] for column in RECORD}
    values["state"] = State(values["state"])
    return JobRecord(**values)
