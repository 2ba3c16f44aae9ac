"""What retention removes: results, events, figures and points that are old. Jobs and verdicts stay for good.

A dataset whose points were removed has empty columns; its digest stays, and posting it again fills them.
"""

from collections.abc import Sequence
from datetime import datetime

from sqlalchemy import ColumnElement, Connection, and_, delete, exists, func, insert, or_, select, update

from service.store.tables import FINAL, dataset_posts, datasets, figures, job_events, jobs, notifications, results

PURGED = "purged"


def old_jobs(connection: Connection, before: datetime, *, limit: int | None) -> Sequence[str]:
    """Jobs that ended before that moment and still have something to remove."""
    query = select(jobs.c.id).where(_old(before)).order_by(jobs.c.id).limit(limit)
    return connection.execute(query).scalars().all()


def purge_jobs(connection: Connection, ids: Sequence[str], now: datetime) -> None:
    """Remove results, events, figures and what is told of notifications that are over; one event says so."""
    connection.execute(delete(results).where(results.c.job_id.in_(ids)))
    connection.execute(delete(figures).where(figures.c.job_id.in_(ids)))
    connection.execute(delete(notifications).where(notifications.c.job_id.in_(ids), notifications.c.state != "waiting"))
    connection.execute(delete(job_events).where(job_events.c.job_id.in_(ids)))
    marks = [{"job_id": job_id, "at": now, "kind": PURGED, "detail": "{}"} for job_id in ids]
    connection.execute(insert(job_events), marks)


def old_datasets(connection: Connection, before: datetime, *, limit: int | None, lock: bool = False) -> Sequence[str]:
    """Datasets with points, last posted before that moment, that no job needs which is younger or has not ended.

    `lock`: for `purge_datasets`, without those that somebody is posting or using at this moment.
    """
    query = select(datasets.c.id).where(_unused(before)).order_by(datasets.c.id).limit(limit)
    if lock:
        query = query.with_for_update(skip_locked=True)
    return connection.execute(query).scalars().all()


def purge_datasets(connection: Connection, ids: Sequence[str], before: datetime) -> int:
    """Empty the columns of these locked datasets; answers how many were.

    Asked again whether each is old: PostgreSQL's first look may have been before a job's commit, its lock after it.
    """
    empty = {"x": b"", "y": b"", "u_x": None, "u_y": None, "series": None}
    still = update(datasets).where(datasets.c.id.in_(ids), _unused(before)).values(**empty)
    return connection.execute(still).rowcount


def _unused(before: datetime) -> ColumnElement[bool]:
    needed = exists().where(
        jobs.c.dataset_id == datasets.c.id, or_(jobs.c.finished_at.is_(None), jobs.c.finished_at >= before)
    )
    posted = exists().where(dataset_posts.c.dataset_id == datasets.c.id, dataset_posts.c.posted_at >= before)
    return and_(datasets.c.created_at < before, func.length(datasets.c.x) > 0, ~needed, ~posted)


def _old(before: datetime) -> ColumnElement[bool]:
    mark = exists().where(job_events.c.job_id == jobs.c.id, job_events.c.kind == PURGED)
    return and_(jobs.c.state.in_(FINAL), jobs.c.finished_at < before, ~mark)
