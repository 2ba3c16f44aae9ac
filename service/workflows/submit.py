"""Take in a dataset or a job: check everything that a caller can mend, store, and only then acknowledge.

Each function is one writing transaction. A job's id goes to the queue after the commit; if that fails, the sweep
sends it.
"""

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection

from service.core.analysis import check
from service.core.observations import Observations, observe
from service.core.plan import Plan
from service.errors import FieldError, InvalidInput, NotFound, Overloaded, TooLarge
from service.settings import Settings
from service.store import datasets, events, jobs, notifications, plans
from service.store.clock import new_id
from service.store.codec import digest, plan_document
from service.store.database import Database
from service.store.jobs import NewJob
from service.store.records import DatasetContent, DatasetRecord, JobDetail, NotificationRecord
from service.store.transport import Transport
from service.workflows.callers import Caller
from service.workflows.notify import check_url
from service.workflows.plans import plan_named
from service.workflows.read import job_seen
from service.workflows.repeat import made_before

RETRY_WHEN_FULL = 5


@dataclass(frozen=True, kw_only=True, slots=True)
class Submission:
    """A job as asked for. Exactly one of `dataset_id` and `dataset`, at most one of `plan` and `plan_id`."""

    dataset_id: str | None = None
    dataset: DatasetContent | None = None
    plan: Plan | None = None
    plan_id: str | None = None
    subject: str | None = None
    priority: int = 0
    notify_url: str | None = None


def post_dataset(
    database: Database, caller: Caller, content: DatasetContent, *, most: int, now: datetime
) -> tuple[DatasetRecord, bool]:
    """Store a dataset of at most `most` points; answers it and whether it is new to this caller.

    Raises InvalidInput, TooLarge, Forbidden.
    """
    caller.must_submit()
    observed = observed_of(content, most)
    document_digest = digest(datasets.dataset_document(content))
    with database.write() as connection:
        dataset_id, new = keep_dataset(connection, caller, content, observed, document_digest, now)
        record = datasets.find(connection, dataset_id)
    if record is None:
        raise NotFound("the dataset is gone")
    return record, new


def submit_job(
    database: Database,
    transport: Transport,
    settings: Settings,
    caller: Caller,
    asked: Submission,
    *,
    repeat_key: str | None,
    now: datetime,
) -> tuple[JobDetail, NotificationRecord | None]:
    """Put in a job and answer it; with a `repeat_key` (Idempotency-Key) that was used before, that job as it now is.

    Raises InvalidInput, TooLarge, Overloaded, Forbidden, Conflict.
    """
    caller.must_submit()
    job_id = new_id()
    plan = Plan() if asked.plan is None else asked.plan
    if asked.plan_id is not None:
        plan = plan_named(database, asked.plan_id)
    if asked.notify_url is not None:
        check_url(settings, caller, asked.notify_url)
    observed, dataset_digest = _checked(database, caller, asked, plan, settings)
    document = plan_document(plan)
    plan_digest = digest(document)
    asked_for = [dataset_digest, plan_digest, asked.subject, asked.priority, asked.notify_url]
    with database.write() as connection:
        before = made_before(connection, caller, repeat_key, asked_for, made_id=job_id, now=now)
        if before is not None:
            return job_seen(connection, caller, before)
        demand_room(connection, settings, 1)
        if asked.dataset is not None and observed is not None:
            dataset_id, _ = keep_dataset(connection, caller, asked.dataset, observed, dataset_digest, now)
            subject = asked.dataset.subject
        else:
            dataset_id, subject = _stored(connection, caller, asked.dataset_id or "")
            datasets.demand_points(connection, [dataset_digest])  # which retention may have taken since they were read
        plans.store(connection, document, plan_digest, now)
        new = NewJob(
            job_id=job_id,
            dataset_id=dataset_id,
            plan_digest=plan_digest,
            subject=asked.subject or subject,
            submitted_by=caller.name,
            priority=asked.priority,
        )
        add_jobs(connection, caller, [new], now)
        notification = None
        if asked.notify_url is not None:
            notification = notifications.add(connection, job_id, asked.notify_url)
    transport.send(job_id, asked.priority)
    job = jobs.waiting_record(new, now)
    return JobDetail(job=job, plan=document.decode(), result=None, provenance=None), notification


def observed_of(content: DatasetContent, most: int) -> Observations:
    """The dataset as the core sees it. Raises InvalidInput naming /x, /y, ..., and TooLarge."""
    if content.x.size > most:
        raise TooLarge(f"the dataset has {content.x.size} points; at most {most} are taken")
    return observe(
        content.x,
        content.y,
        u_x=content.u_x,
        u_y=content.u_y,
        series=content.series,
        level_tolerance=content.level_tolerance,
    )


def demand_room(
    connection: Connection, settings: Settings, jobs_to_come: int, *, outcome: str = "nothing was stored"
) -> None:
    """Raises Overloaded, which says the `outcome`, if so many more jobs would be more than may wait."""
    most = settings.queue_depth
    if jobs.waiting(connection, at_most=most) + jobs_to_come > most:
        message = f"the queue is full: at most {most} jobs may wait; {outcome}"
        raise Overloaded(message, retry_after=RETRY_WHEN_FULL, code="queue_full")


def keep_dataset(
    connection: Connection,
    caller: Caller,
    content: DatasetContent,
    observed: Observations,
    document_digest: str,
    now: datetime,
) -> tuple[str, bool]:
    """Id of the stored dataset, and whether it is new to this caller."""
    dataset_id, new = datasets.store(connection, content, document_digest, datasets.summarise(content, observed), now)
    if not new:
        new = datasets.find(connection, dataset_id, posted_by=caller.only_own) is None
    datasets.posted(connection, dataset_id, caller.name, now)
    return dataset_id, new


def add_jobs(connection: Connection, caller: Caller, new: Sequence[NewJob], now: datetime) -> None:
    """Waiting jobs, each with its first event."""
    jobs.add(connection, new, now)
    events.add_queued(connection, [one.job_id for one in new], now, submitted_by=caller.name)


def _checked(
    database: Database, caller: Caller, asked: Submission, plan: Plan, settings: Settings
) -> tuple[Observations | None, str]:
    """Before the writing transaction, since it may read every point; datasets never change. Observations, digest."""
    by_id: dict[str, str] = {} if asked.plan_id is None else {"/plan/": "/plan_id"}
    if asked.dataset is not None:
        with below("/dataset"):
            observed = observed_of(asked.dataset, settings.points)
        with _named_by_id(by_id):
            check(observed, plan)
        return observed, digest(datasets.dataset_document(asked.dataset))
    with database.read() as connection:
        dataset_id, _ = _stored(connection, caller, asked.dataset_id or "")
        loaded = datasets.load(connection, dataset_id)
    if loaded is None:
        raise NotFound("the dataset is gone")
    with _named_by_id(by_id | {"/dataset/": "/dataset_id"}):
        check(observed_of(loaded[0], loaded[0].x.size), plan)
    return None, loaded[1]


def _stored(connection: Connection, caller: Caller, dataset_id: str) -> tuple[str, str]:
    """Id and subject of a stored dataset that this caller may use."""
    found = datasets.find(connection, dataset_id, posted_by=caller.only_own)
    if found is None:
        raise InvalidInput.at("/dataset_id", f"there is no dataset {dataset_id}", code="no_such_dataset")
    return found.id, found.subject


@contextmanager
def below(place: str) -> Iterator[None]:
    """Pointers of errors raised here are relative to `place` in the body."""
    try:
        yield
    except InvalidInput as error:
        raise InvalidInput([FieldError(place + one.pointer, one.message) for one in error.errors]) from error


@contextmanager
def _named_by_id(names: dict[str, str]) -> Iterator[None]:
    """What stands in a stored document is named by the key of its id, since the body does not hold it."""
    try:
        yield
    except InvalidInput as error:
        raise InvalidInput([_named(one, names) for one in error.errors]) from error


def _named(error: FieldError, names: dict[str, str]) -> FieldError:
    for place, name in names.items():
        if error.pointer.startswith(place):
            return FieldError(name, f"{error.pointer.removeprefix(place)} of it {error.message}")
    return error
