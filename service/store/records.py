"""What travels between the store and the workflows: plain frozen records."""

from dataclasses import dataclass, field
from datetime import datetime
from typing import Any, Generic, TypeVar

from service.core.observations import Floats
from service.store.tables import State

T = TypeVar("T")


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class DatasetContent:
    """One calibration as posted and validated.

    x, y, u_x, u_y: float64 of shape (n,), in the order measured. `details` holds what is said about them (title,
    quantities, units, level_tolerance, measured_at, tags), only the keys that were given.
    """

    subject: str
    x: Floats
    y: Floats
    u_x: Floats | None = None
    u_y: Floats | None = None
    series: tuple[str, ...] | None = None
    details: dict[str, Any] = field(default_factory=dict)

    @property
    def level_tolerance(self) -> float | None:
        """Tolerance within which x count as one level, in the unit of x."""
        return self.details.get("level_tolerance")


@dataclass(frozen=True, kw_only=True, slots=True)
class DatasetRecord:
    """A stored dataset without its points."""

    id: str
    digest: str
    subject: str
    created_at: datetime
    points: int
    summary: dict[str, Any]
    details: dict[str, Any]


@dataclass(frozen=True, kw_only=True, slots=True)
class JobRecord:
    """One row of the history."""

    id: str
    state: State
    dataset_id: str
    plan_digest: str
    subject: str
    submitted_by: str
    priority: int
    queued_at: datetime
    attempts: int
    worker: str | None
    started_at: datetime | None
    finished_at: datetime | None
    stage: str | None
    stage_done: int | None
    stage_of: int | None
    error: str | None
    verdict: str | None
    chosen_degree: int | None


@dataclass(frozen=True, kw_only=True, slots=True)
class JobDetail:
    """A job with the documents that belong to it, as stored."""

    job: JobRecord
    plan: str
    result: str | None
    provenance: str | None


@dataclass(frozen=True, kw_only=True, slots=True)
class Claim:
    """A job in the hands of one worker. Renewing and finishing need the token."""

    job_id: str
    token: str
    worker: str
    dataset_id: str
    plan_digest: str
    subject: str
    submitted_by: str
    priority: int
    attempt: int
    queued_at: datetime
    started_at: datetime


@dataclass(frozen=True, kw_only=True, slots=True)
class Held:
    """A running job as the sweep sees it."""

    id: str
    token: str
    worker: str
    attempts: int
    priority: int
    started_at: datetime
    lease_until: datetime


@dataclass(frozen=True, kw_only=True, slots=True)
class EventRecord:
    """Something that happened to a job; ids grow with time."""

    id: int
    kind: str
    at: datetime
    detail: dict[str, Any]


@dataclass(frozen=True, kw_only=True, slots=True)
class NotificationRecord:
    """Whom to tell of a job's end, and how far that has come."""

    url: str
    state: str
    attempts: int
    next_at: datetime | None
    last_at: datetime | None
    last_answer: str | None


@dataclass(frozen=True, kw_only=True, slots=True)
class VerdictRecord:
    """An issued verdict: its canonical document, the digest of that, and its place in the chain."""

    sequence: int
    digest: str
    document: str


@dataclass(frozen=True, kw_only=True, slots=True)
class VerdictFilter:
    """Which verdicts; None asks nothing. `newest_only`: only the newest of each subject."""

    subject: str | None = None
    verdict: str | None = None
    since: datetime | None = None
    submitted_by: str | None = None
    newest_only: bool = False


@dataclass(frozen=True, kw_only=True, slots=True)
class JobFilter:
    """Which jobs of the history; None asks nothing. `since` is included, `until` is not."""

    subject: str | None = None
    state: State | None = None
    verdict: str | None = None
    submitted_by: str | None = None
    since: datetime | None = None
    until: datetime | None = None
    plan_digest: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Page(Generic[T]):
    """One page of a list, and the id to go on from if there is more."""

    items: tuple[T, ...]
    after: str | None
