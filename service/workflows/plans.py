"""Named, versioned plans: posting one, finding one."""

from datetime import datetime

from service.core.plan import Plan
from service.errors import InvalidInput, NotFound, Overloaded
from service.store import named_plans, plans
from service.store.codec import digest, plan_document, read_plan
from service.store.database import Database
from service.store.named_plans import NamedPlan
from service.store.records import Page
from service.workflows.callers import Caller

TRIES = 100  # each time another caller has taken the number


def post_plan(database: Database, caller: Caller, name: str, plan: Plan, *, now: datetime) -> tuple[NamedPlan, bool]:
    """The newest version of this name, and whether it was made now: the same plan again makes no new version.

    Raises Forbidden, Overloaded.
    """
    caller.must_submit()
    document = plan_document(plan)
    plan_digest = digest(document)
    for _ in range(TRIES):
        with database.write() as connection:
            plans.store(connection, document, plan_digest, now)
            latest = named_plans.latest(connection, name)
            if latest is not None and latest.plan_digest == plan_digest:
                return latest, False
            version = 1 if latest is None else latest.version + 1
            plan_id = named_plans.add(
                connection, name=name, version=version, plan_digest=plan_digest, created_by=caller.name, now=now
            )
            made = None if plan_id is None else named_plans.find(connection, plan_id)
        if made is not None:
            return made, True
    raise Overloaded(f"many callers post versions of {name} at this moment", retry_after=1)


def read_named_plan(database: Database, plan_id: str) -> NamedPlan:
    """One version of a named plan. Raises NotFound."""
    with database.read() as connection:
        found = named_plans.find(connection, plan_id)
    if found is None:
        raise NotFound(f"there is no plan {plan_id}")
    return found


def list_plans(
    database: Database, *, name: str | None, latest_only: bool, before: str | None, limit: int
) -> Page[NamedPlan]:
    """Versions of named plans, newest first."""
    with database.read() as connection:
        return named_plans.newest(connection, name=name, latest_only=latest_only, before=before, limit=limit)


def plan_named(database: Database, plan_id: str) -> Plan:
    """The plan that a job names. Raises InvalidInput at /plan_id."""
    with database.read() as connection:
        found = named_plans.find(connection, plan_id)
    if found is None:
        raise InvalidInput.at("/plan_id", f"there is no plan {plan_id}", code="no_such_plan")
    return read_plan(found.document)
