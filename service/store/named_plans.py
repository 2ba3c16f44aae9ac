"""Plans with a name: every version is immutable; a changed plan is a new version."""

from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection, Select, func, select
from sqlalchemy.dialects.postgresql import insert

from service.store.clock import new_id
from service.store.records import Page
from service.store.tables import named_plans, plans


@dataclass(frozen=True, kw_only=True, slots=True)
class NamedPlan:
    """One version of a named plan; `document` is its canonical JSON."""

    id: str
    name: str
    version: int
    plan_digest: str
    created_by: str
    created_at: datetime
    document: str


def _query() -> Select[tuple[str, str, int, str, str, datetime, str]]:
    n = named_plans.c
    return select(n.id, n.name, n.version, n.plan_digest, n.created_by, n.created_at, plans.c.document).join(
        plans, plans.c.digest == n.plan_digest
    )


def latest(connection: Connection, name: str) -> NamedPlan | None:
    """The newest version of this name."""
    query = _query().where(named_plans.c.name == name).order_by(named_plans.c.version.desc()).limit(1)
    row = connection.execute(query).mappings().first()
    return None if row is None else NamedPlan(**row)


def add(
    connection: Connection, *, name: str, version: int, plan_digest: str, created_by: str, now: datetime
) -> str | None:
    """A new version; its id, or None if another caller took this number meanwhile. The plan itself is stored already.

    On PostgreSQL the second of two callers waits here until the first commits.
    """
    plan_id = new_id()
    row = {
        "id": plan_id,
        "name": name,
        "version": version,
        "plan_digest": plan_digest,
        "created_by": created_by,
        "created_at": now,
    }
    taking = insert(named_plans).on_conflict_do_nothing(index_elements=["name", "version"])
    taken = connection.execute(taking.returning(named_plans.c.id), row).scalar()
    return None if taken is None else plan_id


def find(connection: Connection, plan_id: str) -> NamedPlan | None:
    """One version by its id."""
    row = connection.execute(_query().where(named_plans.c.id == plan_id)).mappings().first()
    return None if row is None else NamedPlan(**row)


def newest(
    connection: Connection, *, name: str | None, latest_only: bool, before: str | None, limit: int
) -> Page[NamedPlan]:
    """Versions, newest first."""
    query = _query().order_by(named_plans.c.id.desc()).limit(limit + 1)
    if name is not None:
        query = query.where(named_plans.c.name == name)
    if latest_only:
        other = named_plans.alias()
        last = select(func.max(other.c.version)).where(other.c.name == named_plans.c.name).scalar_subquery()
        query = query.where(named_plans.c.version == last)
    if before is not None:
        query = query.where(named_plans.c.id < before)
    rows = [NamedPlan(**row) for row in connection.execute(query).mappings()]
    return Page(items=tuple(rows[:limit]), after=rows[limit - 1].id if len(rows) > limit else None)
