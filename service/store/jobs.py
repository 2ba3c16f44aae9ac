"""Jobs as callers see them: putting one in, reading one or many."""

from collections.abc import Sequence
from dataclasses import dataclass, fields
from datetime import datetime
from typing import Any

from sqlalchemy import (
    ColumnElement,
    Connection,
    Integer,
    RowMapping,
    Select,
    Text,
    bindparam,
    func,
    insert,
    literal,
    select,
)

from service.store.clock import EPOCH
from service.store.records import JobDetail, JobFilter, JobRecord, Page
from service.store.tables import WAITING, State, jobs, plans, results
from service.store.turns import next_turn

RECORD = tuple(jobs.c[one.name] for one in fields(JobRecord))

# Built once: building these takes longer than running them.
ADD = insert(jobs).values(turn=next_turn(bindparam("by", type_=Text()), bindparam("at", type_=Integer())))
FIND = select(*RECORD).where(jobs.c.id == bindparam("of_id"))
DETAIL = (
    select(*RECORD, plans.c.document.label("plan"), results.c.document.label("result"), results.c.provenance)
    .join(plans, plans.c.digest == jobs.c.plan_digest)
    .outerjoin(results, results.c.job_id == jobs.c.id)
    .where(jobs.c.id == bindparam("of_id"))
)
COUNT_WAITING = select(func.count()).select_from(
    select(literal(1)).where(WAITING).limit(bindparam("at_most", type_=Integer())).subquery()
)


def waiting(connection: Connection, *, at_most: int) -> int:
    """Number of jobs that wait, counted no further than `at_most`."""
    return connection.execute(COUNT_WAITING, {"at_most": at_most}).scalar_one()


@dataclass(frozen=True, kw_only=True, slots=True)
class NewJob:
    """A job to be put in."""

    job_id: str
    dataset_id: str
    plan_digest: str
    subject: str
    submitted_by: str
    priority: int


def add(connection: Connection, new: Sequence[NewJob], now: datetime) -> None:
    """New jobs, waiting, each at its turn behind the one before; the caller tells the queue after the commit."""
    rows = [
        {
            "id": one.job_id,
            "state": State.QUEUED,
            "dataset_id": one.dataset_id,
            "plan_digest": one.plan_digest,
            "subject": one.subject,
            "submitted_by": one.submitted_by,
            "priority": one.priority,
            "queued_at": now,
            "run_after": EPOCH,  # at once, whatever the clock of the host that runs it says
            "attempts": 0,
            "by": one.submitted_by,
            "at": one.priority,
        }
        for one in new
    ]
    connection.execute(ADD, rows)


def waiting_record(new: NewJob, now: datetime) -> JobRecord:
    """The row of a job that was just put in, without asking for it."""
    return JobRecord(
        id=new.job_id,
        state=State.QUEUED,
        dataset_id=new.dataset_id,
        plan_digest=new.plan_digest,
        subject=new.subject,
        submitted_by=new.submitted_by,
        priority=new.priority,
        queued_at=now,
        attempts=0,
        worker=None,
        started_at=None,
        finished_at=None,
        stage=None,
        stage_done=None,
        stage_of=None,
        error=None,
        verdict=None,
        chosen_degree=None,
    )


def find(connection: Connection, job_id: str) -> JobRecord | None:
    """The row of one job."""
    row = connection.execute(FIND, {"of_id": job_id}).mappings().first()
    return None if row is None else _record(row)


def detail(connection: Connection, job_id: str) -> JobDetail | None:
    """One job with its plan and, once it succeeded, its result and provenance."""
    row = connection.execute(DETAIL, {"of_id": job_id}).mappings().first()
    if row is None:
        return None
    return JobDetail(job=_record(row), plan=row["plan"], result=row["result"], provenance=row["provenance"])


def newest(connection: Connection, wanted: JobFilter, *, before: str | None, limit: int) -> Page[JobRecord]:
    """Jobs that match, newest first."""
    query = newest_query(wanted, before=before, limit=limit)
    rows = [_record(row) for row in connection.execute(query).mappings()]
    return Page(items=tuple(rows[:limit]), after=rows[limit - 1].id if len(rows) > limit else None)


def newest_query(wanted: JobFilter, *, before: str | None, limit: int) -> Select[Any]:
    """What `newest` asks: one row more than a page, to know whether there are more."""
    query = _matching(select(*RECORD), wanted).order_by(jobs.c.id.desc()).limit(limit + 1)
    return query if before is None else query.where(jobs.c.id < before)


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
    narrower = [
        column == value
        for column, value in (
            (jobs.c.subject, wanted.subject),
            (jobs.c.verdict, wanted.verdict),
            (jobs.c.submitted_by, wanted.submitted_by),
            (jobs.c.plan_digest, wanted.plan_digest),
        )
        if value is not None
    ]
    query = query.where(*narrower)
    if wanted.state is not None:
        # Nearly every job succeeded: beside another filter an index of that leads astray, and SQLite, which keeps no
        # statistics unless told, would take it. Of an expression it has none.
        astray = bool(narrower) and wanted.state == State.SUCCEEDED
        state: ColumnElement[str] = func.coalesce(jobs.c.state, "") if astray else jobs.c.state
        query = query.where(state == wanted.state)
    if wanted.since is not None:
        query = query.where(jobs.c.queued_at >= wanted.since)
    if wanted.until is not None:
        query = query.where(jobs.c.queued_at < wanted.until)
    return query


def _record(row: RowMapping) -> JobRecord:
    values = {column.name: row[column.name] for column in RECORD}
    values["state"] = State(values["state"])
    return JobRecord(**values)
