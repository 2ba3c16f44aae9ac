"""Named, versioned plans."""

from typing import Annotated

from fastapi import APIRouter, Depends, Query, Request
from starlette.responses import Response

from service.web.answers import document_response
from service.web.callers import CallerDep
from service.web.conditional import conditional
from service.web.context import Ctx
from service.web.openapi import takes
from service.web.openapi_details import NOT_MODIFIED
from service.web.paging import Cursor, Limit, cursor_of, position
from service.web.problems import documented
from service.web.schemas.common import Identifier, Label, PageOf
from service.web.schemas.plans import NamedPlanBody, NamedPlanView, named_plan_document
from service.web.strict_json import json_body
from service.workflows.plans import list_plans, post_plan, read_named_plan

router = APIRouter(prefix="/v1/plans", tags=["plans"])


@router.post(
    "",
    status_code=201,
    response_model=NamedPlanView,
    responses=documented(
        *(400, 401, 403, 413, 415, 422, 429, 503),
        also={200: {"model": NamedPlanView, "description": "The newest version of this name is the same plan"}},
    ),
    operation_id="post_plan",
    openapi_extra=takes(NamedPlanBody),
    summary="Store a named plan",
)
def store_plan(
    context: Ctx, caller: CallerDep, body: Annotated[NamedPlanBody, Depends(json_body(NamedPlanBody))]
) -> Response:
    """Store a plan under a name. A changed plan is a new version; a version never changes, and jobs name one by id."""
    made, new = post_plan(context.database, caller, body.name, body.plan.plan("/plan"), now=context.now())
    headers = {"Location": f"/v1/plans/{made.id}"}
    return document_response(named_plan_document(made), 201 if new else 200, headers)


@router.get(
    "/{plan_id}",
    response_model=NamedPlanView,
    responses=documented(401, 403, 404, 422, 429, 503, also=NOT_MODIFIED),
    operation_id="get_plan",
    summary="Read a named plan",
)
def get_plan(request: Request, context: Ctx, _caller: CallerDep, plan_id: Identifier) -> Response:
    """One version, with every default written out."""
    found = read_named_plan(context.database, plan_id)
    return conditional(request, found.id, document_response(named_plan_document(found)))


@router.get(
    "",
    response_model=PageOf[NamedPlanView],
    responses=documented(401, 403, 422, 429, 503),
    operation_id="list_plans",
    summary="List named plans",
)
def get_plans(
    context: Ctx,
    _caller: CallerDep,
    name: Annotated[Label | None, Query(description="Only versions of this name.")] = None,
    newest_only: Annotated[bool, Query(description="Only the newest version of each name.")] = False,
    cursor: Cursor = None,
    limit: Limit = None,
) -> Response:
    """Versions, newest first. Plans are shared by all callers."""
    page = list_plans(
        context.database,
        name=name,
        latest_only=newest_only,
        before=position(cursor),
        limit=context.page_size(limit),
    )
    items = b",".join(named_plan_document(one) for one in page.items)
    following = cursor_of(page.after)
    tail = b"null" if following is None else f'"{following}"'.encode()
    return document_response(b'{"items":[' + items + b'],"next_cursor":' + tail + b"}")
