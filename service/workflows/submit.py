"""Take in a dataset or a job: check everything that a caller can mend, store, and only then acknowledge.

Each function is one transaction. A job's id goes to the queue after the commit; if that fails, the sweep sends it.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection

from service.core.analysis import check
from service.core.observations import Observations, observe
from service.core.plan import Plan
from service.errors import FieldError, InvalidInput, NotFound, Overloaded, TooLarge
from service.settings import Settings
from service.store import datasets, events, jobs, plans
from service.store.clock import new_id
from service.store.codec import digest, plan_document
from service.store.database import Database
from service.store.records import DatasetContent, DatasetRecord
from service.store.transport import Transport

RETRY_WHEN_FULL = 5


@dataclass(frozen=True, kw_only=True, slots=True)
class Submission:
    """A job as asked for. Exactly one of `dataset_id` and `dataset` is given."""

    submitted_by: str
    plan: Plan
    dataset_id: str | None = None
    dataset: DatasetContent | None = None
    subject: str | None = None
    priority: int = 0


def post_dataset(
    database: Database, settings: Settings, content: DatasetContent, *, now: datetime
) -> tuple[DatasetRecord, bool]:
    """Store a dataset; answers it and whether it is new. Raises InvalidInput, TooLarge."""
    observed = observed_of(content, settings)
    with database.write() as connection:
        dataset_id, new = _store(connection, content, observed, now)
        record = datasets.find(connection, dataset_id)
    if record is None:
        raise NotFound("the dataset is gone")
    return record, new


def observed_of(content: DatasetContent, settings: Settings) -> Observations:
    """The dataset as the core sees it. Raises InvalidInput naming /x, /y, ..., and TooLarge."""
    if content.x.size > settings.points:
        raise TooLarge(f"the dataset has {content.x.size} points; at most {settings.points} are taken")
    return observe(
        content.x,
        content.y,
        u_x=content.u_x,
        u_y=content.u_y,
        series=content.series,
        level_tolerance=content.level_tolerance,
    )


def submit_job(
    database: Database, transport: Transport, settings: Settings, asked: Submission, *, now: datetime
) -> str:
    """Put in a job and answer its id. Raises InvalidInput, TooLarge, NotFound, Overloaded."""
    job_id = new_id()
    observed = None
    if asked.dataset is not None:
        with _within("/dataset"):
            observed = observed_of(asked.dataset, settings)
        check(observed, asked.plan)
    elif asked.dataset_id is not None:
        _check_stored(database, asked.dataset_id, asked.plan, settings)
    document = plan_document(asked.plan)
    plan_digest = digest(document)
    with database.write() as connection:
        if jobs.waiting(connection, at_most=settings.queue_depth) >= settings.queue_depth:
            raise Overloaded(
                f"{settings.queue_depth} jobs are waiting, the most that are taken; nothing was stored",
                retry_after=RETRY_WHEN_FULL,
                code="queue_full",
            )
        if asked.dataset is not None and observed is not None:
            dataset_id, _ = _store(connection, asked.dataset, observed, now)
            subject = asked.dataset.subject
        else:
            found = datasets.find(connection, asked.dataset_id or "")
            if found is None:
                raise InvalidInput.at("/dataset_id", "names no dataset", code="no_such_dataset")
            dataset_id, subject = found.id, found.subject
        plans.store(connection, document, plan_digest, now)
        jobs.add(
            connection,
            job_id=job_id,
            dataset_id=dataset_id,
            plan_digest=plan_digest,
            subject=asked.subject or subject,
            submitted_by=asked.submitted_by,
            priority=asked.priority,
            now=now,
        )
        events.add(connection, job_id, "queued", now, submitted_by=asked.submitted_by)
    transport.send(job_id, asked.priority)
    return job_id


def _check_stored(database: Database, dataset_id: str, plan: Plan, settings: Settings) -> None:
    """Before the writing transaction, since it reads every point; datasets never change."""
    with database.read() as connection:
        loaded = datasets.load(connection, dataset_id)
    if loaded is None:
        raise InvalidInput.at("/dataset_id", f"there is no dataset {dataset_id}", code="no_such_dataset")
    try:
        check(observed_of(loaded[0], settings), plan)
    except InvalidInput as error:
        raise InvalidInput([_of_stored(one) for one in error.errors]) from error


def _of_stored(error: FieldError) -> FieldError:
    if not error.pointer.startswith("/dataset/"):
        return error
    where = error.pointer.removeprefix("/dataset/")
    return FieldError("/dataset_id", f"{where} of the dataset {error.message}")


def _store(connection: Connection, content: DatasetContent, observed: Observations, now: datetime) -> tuple[str, bool]:
    summary = datasets.summarise(content, observed)
    return datasets.store(connection, content, digest(datasets.dataset_document(content)), summary, now)


@contextmanager
def _within(place: str) -> Iterator[None]:
    """Pointers of errors raised here are relative to `place` in the body."""
    try:
        yield
    except InvalidInput as error:
        raise InvalidInput([FieldError(place + one.pointer, one.message) for one in error.errors]) from error
