"""The queue, batches with their progress, and named plans."""

import json
from dataclasses import dataclass
from typing import Annotated, Any

from fastapi import APIRouter, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from service.errors import FieldError, InvalidInput
from service.store.batches import BatchItem
from service.store.named_plans import NamedPlan
from service.web.context import Context, Ctx
from service.web.pages.labels import sentences
from service.web.pages.page_route import PageRoute
from service.web.pages.pasted import json_label
from service.web.pages.show import show
from service.web.pages.visitors import VisitorDep
from service.web.paging import cursor_of, position
from service.web.schemas.batches import batch_view
from service.web.schemas.jobs import job_summary
from service.web.schemas.plans import named_plan_document
from service.workflows.batches import list_batches, read_batch
from service.workflows.plans import list_plans, read_named_plan
from service.workflows.queue_view import QueueView, batch_items, queue_now

router = APIRouter(route_class=PageRoute, include_in_schema=False)
PAGE = 50
ITEMS = 200
PLANS_ASKED, PLANS_SHOWN = 1000, 3
CursorText = Annotated[str | None, Query(max_length=100)]


@dataclass(frozen=True, kw_only=True, slots=True)
class QueuePage:
    """queue.html. `running`: jobs as the API lists them; `depth`: most that may wait; `messages`: of the queue itself,
    None if it does not answer; `own_only`: whether the numbers are those of this key alone."""

    view: QueueView
    running: list[dict[str, Any]]
    depth: int
    messages: int | None
    own_only: bool


@dataclass(frozen=True, kw_only=True, slots=True)
class BatchesPage:
    """batches.html. `batches`: as GET /v1/batches/{id} answers each, newest first."""

    batches: list[dict[str, Any]]
    older: str | None
    newest: str | None
    active: bool


@dataclass(frozen=True, kw_only=True, slots=True)
class BatchPage:
    """batch.html. `items`: one line each from position `first` on, without results; `following`: address of more;
    `plans`: the named plans that are the batch's."""

    batch: dict[str, Any]
    plans: list[NamedPlan]
    items: list[dict[str, Any]]
    first: int
    following: str | None
    active: bool


@dataclass(frozen=True, kw_only=True, slots=True)
class PlansPage:
    """plans.html. `plans`: the newest version of each name, as the API answers it."""

    plans: list[dict[str, Any]]
    older: str | None
    newest: str | None


@dataclass(frozen=True, kw_only=True, slots=True)
class PlanPage:
    """plan.html. `versions`: of the same name, newest first; `text`: the plan as JSON."""

    plan: dict[str, Any]
    versions: list[dict[str, Any]]
    text: str


@router.get("/queue")
async def queue(request: Request, context: Ctx, visitor: VisitorDep) -> Response:
    """How the queue stands."""

    def gather() -> QueuePage:
        view = queue_now(context.database, visitor.caller, context.now())
        return QueuePage(
            view=view,
            running=[job_summary(job) for job in view.running],
            depth=context.settings.queue_depth,
            messages=context.transport.size(),
            own_only=visitor.caller.only_own is not None,
        )

    return show(request, visitor, "queue.html", await run_in_threadpool(gather))


@router.get("/batches")
async def batches(request: Request, context: Ctx, visitor: VisitorDep, cursor: CursorText = None) -> Response:
    """Batches, newest first."""
    page = await run_in_threadpool(list_batches, context.database, visitor.caller, before=position(cursor), limit=PAGE)
    found = [batch_view(one) for one in page.items]
    after = cursor_of(page.after)
    return show(
        request,
        visitor,
        "batches.html",
        BatchesPage(
            batches=found,
            older=None if after is None else f"/batches?cursor={after}",
            newest=None if cursor is None else "/batches",
            active=any(not one["ended"] for one in found),
        ),
    )


@router.get("/batch/{batch_id}")
async def batch(
    request: Request,
    context: Ctx,
    visitor: VisitorDep,
    batch_id: str,
    first: Annotated[int, Query(ge=0, le=10_000_000)] = 0,
) -> Response:
    """One batch: its progress and what became of each dataset."""

    def gather() -> BatchPage:
        found = batch_view(read_batch(context.database, visitor.caller, batch_id))
        some = batch_items(context.database, batch_id, first=first, limit=ITEMS)
        items = [
            {
                "position": one.position,
                "job_id": one.job_id,
                "subject": one.subject,
                "state": one.state,
                "verdict": one.verdict,
                "chosen_degree": one.chosen_degree,
                "problems": _problems(one),
            }
            for one in some
        ]
        more = first + ITEMS < found["size"]
        return BatchPage(
            batch=found,
            plans=_plans_like(context, found["plan_digest"]),
            items=items,
            first=first,
            following=f"/batch/{batch_id}?first={first + ITEMS}" if more else None,
            active=not found["ended"],
        )

    return show(request, visitor, "batch.html", await run_in_threadpool(gather))


def _problems(item: BatchItem) -> tuple[str, ...]:
    """Why a dataset was refused or its job failed, in words; pointers are of its own line of the batch."""
    error = item.error or (None if item.job_error is None else json.loads(item.job_error))
    if error is None:
        return ()
    fields = [FieldError(one["pointer"], one["message"]) for one in error.get("errors") or ()]
    return sentences(InvalidInput(fields), json_label) if fields else (error["message"],)


def _plans_like(context: Context, plan_digest: str) -> list[NamedPlan]:
    """A batch keeps the digest of its plan, not whether it was named by an id: equal plans are one plan."""
    newest = list_plans(context.database, name=None, latest_only=False, before=None, limit=PLANS_ASKED)
    return [one for one in newest.items if one.plan_digest == plan_digest][:PLANS_SHOWN]


@router.get("/plans")
async def plans(request: Request, context: Ctx, visitor: VisitorDep, cursor: CursorText = None) -> Response:
    """Named plans."""
    page = await run_in_threadpool(
        list_plans, context.database, name=None, latest_only=True, before=position(cursor), limit=PAGE
    )
    after = cursor_of(page.after)
    return show(
        request,
        visitor,
        "plans.html",
        PlansPage(
            plans=[json.loads(named_plan_document(one)) for one in page.items],
            older=None if after is None else f"/plans?cursor={after}",
            newest=None if cursor is None else "/plans",
        ),
    )


@router.get("/plan/{plan_id}")
async def plan(request: Request, context: Ctx, visitor: VisitorDep, plan_id: str) -> Response:
    """One version of a plan."""

    def gather() -> PlanPage:
        found = json.loads(named_plan_document(read_named_plan(context.database, plan_id)))
        versions = list_plans(context.database, name=found["name"], latest_only=False, before=None, limit=PAGE)
        return PlanPage(
            plan=found,
            versions=[json.loads(named_plan_document(one)) for one in versions.items],
            text=json.dumps(found["plan"], indent=2, ensure_ascii=False),
        )

    return show(request, visitor, "plan.html", await run_in_threadpool(gather))
