"""How the queue stands, as far as the caller may know."""

from dataclasses import dataclass
from datetime import datetime
from statistics import median

from service.store import batches, gauge, jobs, queue_view
from service.store.batches import BatchItem
from service.store.database import Database
from service.store.queue_view import Waiting
from service.store.records import JobFilter, JobRecord
from service.store.tables import State
from service.workflows.callers import Caller

LAST = 200
MOST_RUNNING = 50


@dataclass(frozen=True, kw_only=True, slots=True)
class QueueView:
    """What waits, what runs, and how the last verdicts came. Times in seconds; None where nothing has ended.

    `queued` and `oldest_seconds` are of all who wait, `waiting` names those who have most. For a `submit` key: its own
    jobs only, and nothing about the last verdicts.
    """

    queued: int
    waiting: tuple[Waiting, ...]
    running: tuple[JobRecord, ...]
    oldest_seconds: float | None
    ended: int
    median_wait: float | None
    median_run: float | None
    last_at: datetime | None


def queue_now(database: Database, caller: Caller, now: datetime) -> QueueView:
    """One look."""
    own = caller.only_own
    with database.read() as connection:
        queued, oldest = queue_view.waiting_in_all(connection, submitted_by=own)
        waiting = queue_view.waiting_by_submitter(connection, submitted_by=own)
        asked = JobFilter(state=State.RUNNING, submitted_by=own)
        running = jobs.newest(connection, asked, before=None, limit=MOST_RUNNING).items
        last = 0 if own is not None else gauge.last_sequence(connection)
        ended = [] if own is not None else gauge.ended_after(connection, last - LAST)
    return QueueView(
        queued=queued,
        waiting=tuple(waiting),
        running=running,
        oldest_seconds=None if oldest is None else max(0.0, (now - oldest).total_seconds()),
        ended=len(ended),
        median_wait=median((e.started_at - e.queued_at).total_seconds() for e in ended) if ended else None,
        median_run=median((e.finished_at - e.started_at).total_seconds() for e in ended) if ended else None,
        last_at=ended[-1].finished_at if ended else None,
    )


def batch_items(database: Database, batch_id: str, *, first: int, limit: int) -> list[BatchItem]:
    """Items of a batch from position `first` on; read the batch itself first, which asks whether the caller may."""
    with database.read() as connection:
        return batches.items(connection, batch_id, after=first - 1, limit=limit)
