"""What callers read back: datasets, jobs, the history, verdicts. Each function is one reading transaction.

What a caller may not see is not found.
"""

from dataclasses import replace

from sqlalchemy import Connection

from service.errors import NotFound
from service.store import datasets, events, jobs, notifications, verdicts
from service.store.database import Database
from service.store.records import (
    DatasetContent,
    DatasetRecord,
    EventRecord,
    JobDetail,
    JobFilter,
    JobRecord,
    NotificationRecord,
    Page,
    VerdictFilter,
    VerdictRecord,
)
from service.store.tables import State
from service.workflows.callers import Caller


def read_dataset(
    database: Database, caller: Caller, dataset_id: str, *, points: bool = False
) -> tuple[DatasetRecord, DatasetContent | None]:
    """One dataset, with its numbers if asked. Raises NotFound."""
    with database.read() as connection:
        record = datasets.find(connection, dataset_id, posted_by=caller.only_own)
        loaded = datasets.load(connection, dataset_id) if points and record is not None else None
    if record is None:
        raise NotFound(f"there is no dataset {dataset_id}")
    return record, None if loaded is None else loaded[0]


def list_datasets(
    database: Database, caller: Caller, *, subject: str | None, before: str | None, limit: int
) -> Page[DatasetRecord]:
    """Datasets, newest first."""
    with database.read() as connection:
        return datasets.newest(connection, subject=subject, posted_by=caller.only_own, before=before, limit=limit)


def read_job(database: Database, caller: Caller, job_id: str) -> tuple[JobDetail, NotificationRecord | None]:
    """One job with its plan, its notification and, once it succeeded, its result. Raises NotFound."""
    with database.read() as connection:
        return job_seen(connection, caller, job_id)


def read_events(
    database: Database, caller: Caller, job_id: str, *, after: int = 0
) -> tuple[JobRecord, list[EventRecord]]:
    """One job and what has happened to it since event `after`. Raises NotFound."""
    with database.read() as connection:
        job = _job(connection, caller, job_id)
        return job, events.since(connection, job_id, after)


def list_jobs(
    database: Database, caller: Caller, wanted: JobFilter, *, before: str | None, limit: int
) -> Page[JobRecord]:
    """The history, newest first."""
    if caller.only_own is not None:
        if wanted.submitted_by not in (None, caller.only_own):
            return Page(items=(), after=None)
        wanted = replace(wanted, submitted_by=caller.only_own)
    with database.read() as connection:
        return jobs.newest(connection, wanted, before=before, limit=limit)


def read_verdict(database: Database, caller: Caller, job_id: str) -> VerdictRecord:
    """The verdict that a job ended with. Raises NotFound, with a code that says whether to ask again."""
    with database.read() as connection:
        job = _job(connection, caller, job_id)
        verdict = verdicts.of_job(connection, job_id)
    if verdict is not None:
        return verdict
    if job.state in (State.QUEUED, State.RUNNING):
        raise NotFound(f"job {job_id} is {job.state}: it has no verdict yet", code="verdict_not_ready")
    raise NotFound(f"job {job_id} {job.state}: it has no verdict", code="no_verdict")


def list_verdicts(
    database: Database, caller: Caller, wanted: VerdictFilter, *, after: int, limit: int
) -> tuple[VerdictRecord, ...]:
    """Verdicts in the order of issue, from the one after `after` on."""
    wanted = replace(wanted, submitted_by=caller.only_own)
    with database.read() as connection:
        return verdicts.issued(connection, wanted, after=after, limit=limit)


def job_seen(connection: Connection, caller: Caller, job_id: str) -> tuple[JobDetail, NotificationRecord | None]:
    """The same within a transaction."""
    found = jobs.detail(connection, job_id)
    if found is None or not sees(caller, found.job):
        raise NotFound(f"there is no job {job_id}")
    return found, notifications.of_job(connection, job_id)


def sees(caller: Caller, job: JobRecord) -> bool:
    """Whether this caller may know of the job."""
    return caller.only_own in (None, job.submitted_by)


def _job(connection: Connection, caller: Caller, job_id: str) -> JobRecord:
    job = jobs.find(connection, job_id)
    if job is None or not sees(caller, job):
        raise NotFound(f"there is no job {job_id}")
    return job
