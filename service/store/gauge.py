"""Numbers of what goes on now, from the tables."""

from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection, func, select

from service.store.tables import FINAL, WAITING, State, jobs, notifications, verdicts

MOST_ENDED = 10_000


@dataclass(frozen=True, kw_only=True, slots=True)
class Now:
    """What waits and runs. `oldest`: when the job that waits longest was put in."""

    queued: int
    running: int
    oldest: datetime | None
    notifications: int


@dataclass(frozen=True, kw_only=True, slots=True)
class Ended:
    """One job that succeeded."""

    sequence: int
    verdict: str
    queued_at: datetime
    started_at: datetime
    finished_at: datetime


def now(connection: Connection) -> Now:
    """Count."""
    queued, oldest = connection.execute(select(func.count(), func.min(jobs.c.queued_at)).where(WAITING)).one()
    running = connection.execute(select(func.count()).where(jobs.c.state == State.RUNNING)).scalar_one()
    telling = (
        select(func.count())
        .select_from(notifications.join(jobs, jobs.c.id == notifications.c.job_id))
        .where(notifications.c.state == "waiting", jobs.c.state.in_(FINAL))
    )
    waiting = connection.execute(telling).scalar_one()
    return Now(queued=queued, running=running, oldest=oldest, notifications=waiting)


def last_sequence(connection: Connection) -> int:
    """Of the newest verdict; 0 if there is none."""
    return connection.execute(select(func.max(verdicts.c.sequence))).scalar() or 0


def ended_after(connection: Connection, sequence: int) -> list[Ended]:
    """Jobs whose verdicts came after this one, in order."""
    query = (
        select(verdicts.c.sequence, verdicts.c.verdict, jobs.c.queued_at, jobs.c.started_at, jobs.c.finished_at)
        .join(jobs, jobs.c.id == verdicts.c.job_id)
        .where(verdicts.c.sequence > sequence)
        .order_by(verdicts.c.sequence)
        .limit(MOST_ENDED)
    )
    return [Ended(**row) for row in connection.execute(query).mappings()]
