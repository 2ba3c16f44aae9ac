"""The tables, the same on SQLite and PostgreSQL. Names of constraints follow one convention, so migrations find them.

The jobs table is the truth about every job; the queue only carries ids. Times are integer microseconds since 1970 UTC,
documents are canonical JSON text, columns of numbers are little-endian float64: all exact on both engines.
"""

from datetime import datetime
from enum import StrEnum
from typing import Any

from sqlalchemy import (
    BigInteger,
    CheckConstraint,
    Column,
    ColumnElement,
    Dialect,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    Text,
    TypeDecorator,
    UniqueConstraint,
    literal_column,
)

from service.store.clock import from_microseconds, to_microseconds

metadata = MetaData(
    naming_convention={
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "fk": "fk_%(table_name)s_%(column_0_N_name)s_%(referred_table_name)s",
        "pk": "pk_%(table_name)s",
    }
)


class State(StrEnum):
    """Where a job is. `succeeded`, `failed` and `cancelled` are final."""

    QUEUED = "queued"
    """Waits for a worker, perhaps until `run_after`."""
    RUNNING = "running"
    """Held by the worker that knows `token`, until `lease_until` unless renewed."""
    SUCCEEDED = "succeeded"
    """Has a result and a verdict."""
    FAILED = "failed"
    """Has an error; its dataset, plan and attempts are kept."""
    CANCELLED = "cancelled"
    """Was called off before it ended."""


FINAL = (State.SUCCEEDED, State.FAILED, State.CANCELLED)


class Instant(TypeDecorator[datetime]):
    """An aware datetime kept as integer microseconds."""

    impl = BigInteger
    cache_ok = True

    def process_bind_param(self, value: datetime | None, dialect: Dialect) -> Any:  # noqa: ARG002 (SQLAlchemy's form)
        """To the database."""
        return None if value is None else to_microseconds(value)

    def process_result_value(self, value: Any, dialect: Dialect) -> datetime | None:  # noqa: ARG002
        """From the database."""
        return None if value is None else from_microseconds(value)


Serial = BigInteger().with_variant(Integer(), "sqlite")
Id = String(36)
Digest = String(64)

datasets = Table(
    "datasets",
    metadata,
    Column("id", Id, primary_key=True),
    Column("digest", Digest, nullable=False, unique=True),
    Column("subject", Text, nullable=False),
    Column("created_at", Instant, nullable=False),
    Column("points", Integer, nullable=False),
    Column("summary", Text, nullable=False),  # JSON: ranges, levels, which columns there are
    Column("details", Text, nullable=False),  # JSON: title, quantities, units, tags, ...
    Column("series", Text),  # JSON list of labels
    Column("x", LargeBinary, nullable=False),
    Column("y", LargeBinary, nullable=False),
    Column("u_x", LargeBinary),
    Column("u_y", LargeBinary),
    Index(None, "subject", "id"),
)

plans = Table(
    "plans",
    metadata,
    Column("digest", Digest, primary_key=True),
    Column("document", Text, nullable=False),
    Column("created_at", Instant, nullable=False),
)

jobs = Table(
    "jobs",
    metadata,
    Column("id", Id, primary_key=True),
    Column("state", String(16), nullable=False),
    Column("dataset_id", Id, ForeignKey(datasets.c.id), nullable=False),
    Column("plan_digest", Digest, ForeignKey(plans.c.digest), nullable=False),
    Column("subject", Text, nullable=False),
    Column("submitted_by", Text, nullable=False),
    Column("priority", Integer, nullable=False),
    Column("turn", BigInteger, nullable=False, server_default="0"),  # place among the submitters of one priority
    Column("queued_at", Instant, nullable=False),
    Column("run_after", Instant, nullable=False),  # not before this moment
    Column("attempts", Integer, nullable=False),
    Column("token", Id),  # fencing: only who knows it may renew or finish
    Column("lease_until", Instant),
    Column("worker", Text),
    Column("started_at", Instant),  # of the last attempt
    Column("finished_at", Instant),
    Column("stage", Text),
    Column("stage_done", Integer),
    Column("stage_of", Integer),
    Column("error", Text),  # JSON: code, message, errors
    Column("verdict", String(16)),
    Column("chosen_degree", Integer),
    CheckConstraint("state IN ('queued', 'running', 'succeeded', 'failed', 'cancelled')", name="state_known"),
    CheckConstraint("state <> 'running' OR (token IS NOT NULL AND lease_until IS NOT NULL)", name="running_is_held"),
    Index(None, "state", "id"),
    Index(None, "subject", "id"),
    Index(None, "submitted_by", "id"),
    Index(None, "verdict", "id"),
    Index(None, "dataset_id"),
)

# Of a literal, not a parameter: only then does either engine see that the indexes of what waits apply.
WAITING = jobs.c.state == literal_column(f"'{State.QUEUED}'")


def _index_of_waiting(name: str, *columns: ColumnElement[Any]) -> None:
    Index(name, *columns, sqlite_where=WAITING, postgresql_where=WAITING)


_index_of_waiting("ix_jobs_next", jobs.c.priority.desc(), jobs.c.turn, jobs.c.id, jobs.c.run_after)
_index_of_waiting("ix_jobs_turn", jobs.c.turn, jobs.c.id)
_index_of_waiting("ix_jobs_submitter_turn", jobs.c.submitted_by, jobs.c.priority, jobs.c.turn)

job_events = Table(
    "job_events",
    metadata,
    Column("id", Serial, primary_key=True, autoincrement=True),
    Column("job_id", Id, ForeignKey(jobs.c.id), nullable=False),
    Column("at", Instant, nullable=False),
    Column("kind", String(16), nullable=False),
    Column("detail", Text, nullable=False),  # JSON
    Index(None, "job_id", "id"),
)

results = Table(
    "results",
    metadata,
    Column("job_id", Id, ForeignKey(jobs.c.id), primary_key=True),
    Column("digest", Digest, nullable=False),
    Column("document", Text, nullable=False),  # canonical JSON of what the core computed
    Column("provenance", Text, nullable=False),  # JSON
)

verdicts = Table(
    "verdicts",
    metadata,
    Column("sequence", BigInteger, primary_key=True, autoincrement=False),  # gapless, in order of issue
    Column("job_id", Id, ForeignKey(jobs.c.id), nullable=False),
    Column("subject", Text, nullable=False),
    Column("verdict", String(16), nullable=False),
    Column("issued_at", Instant, nullable=False),
    Column("digest", Digest, nullable=False),
    Column("previous", Digest),
    Column("document", Text, nullable=False),  # canonical JSON; `digest` is its SHA-256
    UniqueConstraint("job_id"),
    UniqueConstraint("digest"),
    Index(None, "subject", "sequence"),
)

# One row, the end of the chain of verdicts. Updating it locks it, which orders the issuers on PostgreSQL.
verdict_chain = Table(
    "verdict_chain",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=False),
    Column("length", BigInteger, nullable=False),
    Column("head", Digest),
    CheckConstraint("id = 1", name="one_row"),
)

keys = Table(
    "keys",
    metadata,
    Column("id", Id, primary_key=True),
    Column("name", Text, nullable=False, unique=True),
    Column("role", String(16), nullable=False),
    Column("hash", Digest, nullable=False, unique=True),  # SHA-256 of the key, which is 256 random bits
    Column("notify_secret", Text, nullable=False),  # signs notifications of the jobs submitted with this key
    Column("created_at", Instant, nullable=False),
    Column("revoked_at", Instant),
    CheckConstraint("role IN ('submit', 'read', 'admin')", name="role_known"),
)

dataset_posts = Table(  # who has posted a dataset, and when: the same content is stored once
    "dataset_posts",
    metadata,
    Column("submitted_by", Text, primary_key=True),
    Column("dataset_id", Id, ForeignKey(datasets.c.id), primary_key=True),
    Column("posted_at", Instant, nullable=False, server_default="0"),  # the last time
    Index(None, "dataset_id", "posted_at"),
)

repeats = Table(  # Idempotency-Key: what a post has made, so that the same post again makes nothing
    "repeats",
    metadata,
    Column("submitted_by", Text, primary_key=True),
    Column("key", Text, primary_key=True),
    Column("fingerprint", Digest, nullable=False),
    Column("made_id", Id, nullable=False),
    Column("created_at", Instant, nullable=False),
    Index(None, "created_at"),
)

named_plans = Table(
    "named_plans",
    metadata,
    Column("id", Id, primary_key=True),
    Column("name", Text, nullable=False),
    Column("version", Integer, nullable=False),
    Column("plan_digest", Digest, ForeignKey(plans.c.digest), nullable=False),
    Column("created_by", Text, nullable=False),
    Column("created_at", Instant, nullable=False),
    UniqueConstraint("name", "version"),
)

batches = Table(
    "batches",
    metadata,
    Column("id", Id, primary_key=True),
    Column("submitted_by", Text, nullable=False),
    Column("plan_digest", Digest, ForeignKey(plans.c.digest), nullable=False),
    Column("created_at", Instant, nullable=False),
    Column("size", Integer, nullable=False),
    Index(None, "submitted_by", "id"),
)

batch_items = Table(
    "batch_items",
    metadata,
    Column("batch_id", Id, ForeignKey(batches.c.id), primary_key=True),
    Column("position", Integer, primary_key=True, autoincrement=False),  # in the batch as posted, from 0
    Column("job_id", Id, ForeignKey(jobs.c.id), index=True),
    Column("error", Text),  # JSON: why this dataset was refused
    CheckConstraint("(job_id IS NULL) <> (error IS NULL)", name="taken_or_refused"),
)

notifications = Table(
    "notifications",
    metadata,
    Column("job_id", Id, ForeignKey(jobs.c.id), primary_key=True),
    Column("url", Text, nullable=False),
    Column("state", String(16), nullable=False),
    Column("attempts", Integer, nullable=False),
    Column("next_at", Instant),  # null until the job has ended
    Column("last_at", Instant),
    Column("last_answer", Text),
    CheckConstraint("state IN ('waiting', 'delivered', 'given_up')", name="state_known"),
    Index(None, "state", "next_at"),
)

figures = Table(  # drawn once; nothing here that cannot be drawn again
    "figures",
    metadata,
    Column("job_id", Id, ForeignKey(jobs.c.id, ondelete="CASCADE"), primary_key=True),
    Column("name", String(16), primary_key=True),
    Column("format", String(8), primary_key=True),
    Column("version", Integer, nullable=False),  # of the code that drew it
    Column("digest", Digest, nullable=False),
    Column("data", LargeBinary, nullable=False),
    Column("made_at", Instant, nullable=False),
)

sessions = Table(  # of people who signed in to the pages with a key
    "sessions",
    metadata,
    Column("hash", Digest, primary_key=True),  # SHA-256 of the cookie, which is 256 random bits
    Column("key_id", Id, ForeignKey(keys.c.id, ondelete="CASCADE"), nullable=False, index=True),
    Column("created_at", Instant, nullable=False),
    Column("expires_at", Instant, nullable=False, index=True),
)
