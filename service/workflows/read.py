"""What callers read back: datasets, jobs, the history, verdicts. Each function is one reading transaction."""

from service.errors import NotFound
from service.store import datasets, jobs, verdicts
from service.store.database import Database
from service.store.records import (
    DatasetContent,
    DatasetRecord,
    JobDetail,
    JobFilter,
    JobRecord,
    Page,
    VerdictRecord,
)
from service.store.tables import State


def read_dataset(
    database: Database, dataset_id: str, *, points: bool = False
) -> tuple[DatasetRecord, DatasetContent | None]:
    """One dataset, with its numbers if asked. Raises NotFound."""
    with database.read() as connection:
        record = datasets.find(connection, dataset_id)
        loaded = datasets.load(connection, dataset_id) if points else None
    if record is None:
        raise NotFound(f"there is no dataset {dataset_id}")
    return record, None if loaded is None else loaded[0]


def list_datasets(database: Database, *, subject: str | None, before: str | None, limit: int) -> Page[DatasetRecord]:
    """Datasets, newest first."""
    with database.read() as connection:
        return datasets.newest(connection, subject=subject, before=before, limit=limit)


def read_job(database: Database, job_id: str) -> JobDetail:
    """One job with its plan and, once it succeeded, its result. Raises NotFound."""
    with database.read() as connection:
        found = jobs.detail(connection, job_id)
    if found is None:
        raise NotFound(f"there is no job {job_id}")
    return found


def list_jobs(database: Database, wanted: JobFilter, *, before: str | None, limit: int) -> Page[JobRecord]:
    """The history, newest first."""
    with database.read() as connection:
        return jobs.newest(connection, wanted, before=before, limit=limit)


def read_verdict(database: Database, job_id: str) -> VerdictRecord:
    """The verdict that a job ended with. Raises NotFound, with a code that says whether to ask again."""
    with database.read() as connection:
        verdict = verdicts.of_job(connection, job_id)
        job = None if verdict is not None else jobs.find(connection, job_id)
    if verdict is not None:
        return verdict
    if job is None:
        raise NotFound(f"there is no job {job_id}")
    if job.state in (State.QUEUED, State.RUNNING):
        raise NotFound(f"job {job_id} is {job.state}: it has no verdict yet", code="verdict_not_ready")
    raise NotFound(f"job {job_id} {job.state}: it has no verdict", code="no_verdict")
