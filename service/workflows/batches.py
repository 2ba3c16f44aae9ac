"""Many datasets at once under one plan: each is taken or refused by itself; the jobs are put in all or none."""

from collections.abc import Iterator, Sequence
from datetime import datetime
from typing import Any

from service.core.analysis import check
from service.core.observations import Observations
from service.core.plan import Plan
from service.errors import InvalidInput, LeastbendError, NotFound, TooLarge
from service.settings import Settings
from service.store import batches, datasets, plans
from service.store.batches import BatchItem, BatchRecord
from service.store.clock import new_id
from service.store.codec import canonical, digest, plan_document
from service.store.database import Database
from service.store.jobs import NewJob
from service.store.records import DatasetContent, Page
from service.store.transport import Transport
from service.workflows.callers import Caller
from service.workflows.repeat import known_before, made_before
from service.workflows.run import describe
from service.workflows.submit import add_jobs, below, demand_room, keep_dataset, observed_of

Posted = DatasetContent | InvalidInput
Good = tuple[DatasetContent, Observations, str]  # with its digest
STEP = 100  # datasets stored in one transaction
MESSAGES = 200  # sent at once; the sweep sends the rest as they are needed
ROWS = 200  # of the results, in one reading transaction


def submit_batch(
    database: Database,
    transport: Transport,
    settings: Settings,
    caller: Caller,
    posted: Sequence[Posted],
    plan: Plan,
    *,
    priority: int,
    repeat_key: str | None,
    now: datetime,
) -> str:
    """Put in one job for each good dataset and keep the reason for each bad one; the batch's id.

    Raises TooLarge, InvalidInput, Overloaded, Forbidden, Conflict.
    """
    caller.must_submit()
    if not posted:
        raise InvalidInput.at("/datasets", "holds no dataset")
    if len(posted) > settings.batch_size:
        raise TooLarge(f"at most {settings.batch_size} datasets are taken in one batch")
    checked = [_checked(one, plan, settings) for one in posted]
    good = [one for one in checked if not isinstance(one, dict)]
    document = plan_document(plan)
    plan_digest, batch_id = digest(document), new_id()
    named = [digest(canonical(one)) if isinstance(one, dict) else one[2] for one in checked]
    asked_for = [*named, plan_digest, priority]
    with database.read() as connection:  # before the datasets are stored, and again with the jobs
        before = known_before(connection, caller, repeat_key, asked_for, now=now)
        if before is not None:
            return before
        demand_room(connection, settings, len(good))
    dataset_ids = _keep_datasets(database, caller, good, now)
    new = [
        NewJob(
            job_id=new_id(),
            dataset_id=dataset_id,
            plan_digest=plan_digest,
            subject=content.subject,
            submitted_by=caller.name,
            priority=priority,
        )
        for dataset_id, (content, _, _) in zip(dataset_ids, good, strict=True)
    ]
    taken = iter(new)
    items = [(None, one) if isinstance(one, dict) else (next(taken).job_id, None) for one in checked]
    with database.write() as connection:
        before = made_before(connection, caller, repeat_key, asked_for, made_id=batch_id, now=now)
        if before is not None:
            return before
        demand_room(connection, settings, len(new), outcome="the datasets were stored, no job was put in")
        datasets.demand_points(connection, [dataset_digest for _, _, dataset_digest in good])
        plans.store(connection, document, plan_digest, now)
        if new:
            add_jobs(connection, caller, new, now)
        batches.add(
            connection, batch_id=batch_id, submitted_by=caller.name, plan_digest=plan_digest, now=now, items=items
        )
    for one in new[:MESSAGES]:
        transport.send(one.job_id, priority)
    return batch_id


def _keep_datasets(database: Database, caller: Caller, good: Sequence[Good], now: datetime) -> list[str]:
    """Ids of the stored datasets. In steps, so that others can write in between: a dataset alone means nothing yet, and
    the same batch posted again finds those that are there. In the order of digests, in which all lock them.
    """
    ids: dict[str, str] = {}
    by_digest = sorted(good, key=lambda one: one[2])
    for start in range(0, len(good), STEP):
        with database.write() as connection:
            for content, observed, dataset_digest in by_digest[start : start + STEP]:
                ids[dataset_digest] = keep_dataset(connection, caller, content, observed, dataset_digest, now)[0]
    return [ids[dataset_digest] for _, _, dataset_digest in good]


def _checked(one: Posted, plan: Plan, settings: Settings) -> Good | dict[str, Any]:
    if isinstance(one, InvalidInput):
        return describe(one)
    try:
        with below("/dataset"):
            observed = observed_of(one, settings.points)
        check(observed, plan)
    except LeastbendError as error:
        return describe(error)
    return one, observed, digest(datasets.dataset_document(one))


def read_batch(database: Database, caller: Caller, batch_id: str) -> BatchRecord:
    """One batch with its progress. Raises NotFound."""
    with database.read() as connection:
        found = batches.find(connection, batch_id)
    if found is None or caller.only_own not in (None, found.submitted_by):
        raise NotFound(f"there is no batch {batch_id}")
    return found


def list_batches(database: Database, caller: Caller, *, before: str | None, limit: int) -> Page[BatchRecord]:
    """Batches, newest first."""
    with database.read() as connection:
        return batches.newest(connection, submitted_by=caller.only_own, before=before, limit=limit)


def batch_results(database: Database, batch_id: str) -> Iterator[BatchItem]:
    """Every item of a batch in order, read bit by bit, so that a large one needs no more memory than a small one."""
    after = -1
    while True:
        with database.read() as connection:
            some = batches.items(connection, batch_id, after=after, limit=ROWS)
        yield from some
        if len(some) < ROWS:
            return
        after = some[-1].position
