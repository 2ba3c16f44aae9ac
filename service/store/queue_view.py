"""What waits, by submitter: for those who look after the queue."""

from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection, func, select

from service.store.tables import WAITING, jobs

MOST_SUBMITTERS = 50


@dataclass(frozen=True, kw_only=True, slots=True)
class Waiting:
    """Jobs of one submitter that wait. `oldest`: when the first of them was put in."""

    submitted_by: str
    jobs: int
    oldest: datetime


def waiting_in_all(connection: Connection, *, submitted_by: str | None) -> tuple[int, datetime | None]:
    """How many wait, and when the first of them was put in; of one submitter only, if named."""
    query = select(func.count(), func.min(jobs.c.queued_at)).where(WAITING)
    if submitted_by is not None:
        query = query.where(jobs.c.submitted_by == submitted_by)
    count, oldest = connection.execute(query).one()
    return count, oldest


def waiting_by_submitter(connection: Connection, *, submitted_by: str | None) -> list[Waiting]:
    """Most jobs first, and no more submitters than a page can show; of one submitter only, if named."""
    count = func.count()
    query = (
        select(jobs.c.submitted_by, count.label("jobs"), func.min(jobs.c.queued_at).label("oldest"))
        .where(WAITING)
        .group_by(jobs.c.submitted_by)
        .order_by(count.desc(), jobs.c.submitted_by)
        .limit(MOST_SUBMITTERS)
    )
    if submitted_by is not None:
        query = query.where(jobs.c.submitted_by == submitted_by)
    return [Waiting(**row) for row in connection.execute(query).mappings()]
