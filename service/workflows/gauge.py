"""What administrators and their monitoring ask: how much waits, how old it is, what has ended."""

from dataclasses import dataclass
from datetime import datetime

from service.store import gauge as counts
from service.store.database import Database
from service.store.gauge import Ended

__all__ = ["Ended", "Gauge", "ended_since", "gauge", "last_verdict"]


@dataclass(frozen=True, kw_only=True, slots=True)
class Gauge:
    """What goes on now. `oldest_seconds`: age of the job that waits longest."""

    queued: int
    running: int
    oldest_seconds: float
    notifications: int


def gauge(database: Database, now: datetime) -> Gauge:
    """Count, in one transaction."""
    with database.read() as connection:
        found = counts.now(connection)
    age = 0.0 if found.oldest is None else max(0.0, (now - found.oldest).total_seconds())
    return Gauge(queued=found.queued, running=found.running, oldest_seconds=age, notifications=found.notifications)


def last_verdict(database: Database) -> int:
    """The number of the newest verdict; 0 if there is none."""
    with database.read() as connection:
        return counts.last_sequence(connection)


def ended_since(database: Database, sequence: int) -> list[Ended]:
    """Jobs whose verdicts came after the one numbered `sequence`, in order; of very many, the first."""
    with database.read() as connection:
        return counts.ended_after(connection, sequence)
