"""Retention: remove what is old, by age, in small steps beside the running service. Verdicts are kept for good."""

from dataclasses import dataclass
from datetime import datetime

from service.store import retention
from service.store.database import Database

STEP = 200  # jobs or datasets of one transaction, so that nobody waits long


@dataclass(frozen=True, kw_only=True, slots=True)
class Purged:
    """What was removed or, in a dry run, would be: jobs that lose results and events, datasets that lose points."""

    jobs: int
    datasets: int
    dry_run: bool


def purge(database: Database, *, before: datetime, now: datetime, dry_run: bool) -> Purged:
    """Everything that ended before `before`. What is not final, or is needed by a younger job, stays."""
    if dry_run:
        with database.read() as connection:
            jobs = len(retention.old_jobs(connection, before, limit=None))
            datasets = len(retention.old_datasets(connection, before, limit=None))
        return Purged(jobs=jobs, datasets=datasets, dry_run=True)
    jobs = datasets = 0
    while True:
        with database.write() as connection:
            ids = retention.old_jobs(connection, before, limit=STEP)
            if ids:
                retention.purge_jobs(connection, ids, now)
        jobs += len(ids)
        if not ids:
            break
    while True:
        with database.write() as connection:
            ids = retention.old_datasets(connection, before, limit=STEP, lock=True)
            if ids:
                datasets += retention.purge_datasets(connection, ids, before)
        if not ids:
            break
    return Purged(jobs=jobs, datasets=datasets, dry_run=False)
