"""Batches: many datasets under one plan; NDJSON or JSON in, NDJSON out."""

from collections.abc import Iterator
from typing import Annotated

from fastapi import APIRouter, Depends, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response, StreamingResponse

from service.core.plan import Plan
from service.errors import InvalidInput
from service.web.answers import json_response
from service.web.callers import CallerDep
from service.web.context import Ctx
from service.web.idempotency import IdempotencyKey, repeat_key
from service.web.openapi import lines_of, takes
from service.web.paging import Cursor, Limit, cursor_of, position
from service.web.problems import documented
from service.web.schemas.batches import (
    BatchBody,
    BatchView,
    PostedBatch,
    batch_item_line,
    batch_view,
    datasets_of,
)
from service.web.schemas.common import Identifier, Label, PageOf
from service.web.schemas.jobs import Priority
from service.web.strict_json import demand_type, parse_json, read_body, read_value
from service.workflows.batches import batch_results, list_batches, read_batch, submit_batch
from service.workflows.plans import plan_named

router = APIRouter(prefix="/v1/batches", tags=["batches"])
JSON, NDJSON = "application/json", "application/x-ndjson"


async def posted_batch(
    request: Request,
    plan_id: Annotated[Label | None, Query(description="With NDJSON: a named plan; absent: every default.")] = None,
    priority: Annotated[Priority | None, Query(description="With NDJSON: higher runs first.")] = None,
) -> PostedBatch:
    """The batch; with NDJSON each line is one dataset, and the query says the rest."""
    kind = demand_type(request, JSON, NDJSON)
    raw, most = await read_body(request), request.app.state.context.settings.batch_size
    if kind == NDJSON:
        return await run_in_threadpool(lambda: datasets_of(raw, plan_id, priority or 0, most=most))
    if plan_id is not None or priority is not None:
        raise InvalidInput.at("/query", "plan_id and priority belong into the body when that is JSON")
    return await run_in_threadpool(lambda: read_value(BatchBody, parse_json(raw)).posted(most=most))


@router.post(
    "",
    status_code=202,
    response_model=BatchView,
    responses=documented(400, 401, 403, 409, 413, 415, 422, 429, 503),
    operation_id="post_batch",
    openapi_extra=takes(BatchBody, NDJSON),
    summary="Fit and select many datasets",
)
def post_batch(
    context: Ctx,
    caller: CallerDep,
    batch: Annotated[PostedBatch, Depends(posted_batch)],
    key: IdempotencyKey = None,
) -> Response:
    """Queue one job for each dataset, all under one plan. A bad dataset is refused by itself; the others are taken.

    409 `dataset_purged` if retention has removed points that came with this batch before its jobs were put in.
    """
    plan = batch.plan or Plan()
    if batch.plan_id is not None:
        plan = plan_named(context.database, batch.plan_id)
    batch_id = submit_batch(
        context.database,
        context.transport,
        context.settings,
        caller,
        batch.datasets,
        plan,
        priority=batch.priority,
        repeat_key=repeat_key(key),
        now=context.now(),
    )
    headers = {"Location": f"/v1/batches/{batch_id}", "Retry-After": "1"}
    return json_response(batch_view(read_batch(context.database, caller, batch_id)), status=202, headers=headers)


@router.get(
    "/{batch_id}",
    response_model=BatchView,
    responses=documented(401, 403, 404, 422, 429, 503),
    operation_id="get_batch",
    summary="Read a batch's progress",
)
def get_batch(context: Ctx, caller: CallerDep, batch_id: Identifier) -> Response:
    """How many of its jobs are where."""
    return json_response(batch_view(read_batch(context.database, caller, batch_id)))


@router.get(
    "/{batch_id}/results",
    response_class=StreamingResponse,
    responses=documented(
        *(401, 403, 404, 422, 429, 503),
        also={
            200: {
                "description": "One BatchItemView a line, in the order posted",
                "content": {NDJSON: {"schema": lines_of("BatchItemView")}},
            }
        },
    ),
    operation_id="get_batch_results",
    summary="Read a batch's results",
)
def get_batch_results(context: Ctx, caller: CallerDep, batch_id: Identifier) -> Response:
    """NDJSON, one item a line: the job's state and, once it has one, its result; or why the dataset was refused."""
    read_batch(context.database, caller, batch_id)

    def lines() -> Iterator[bytes]:
        for item in batch_results(context.database, batch_id):
            yield batch_item_line(item)

    return StreamingResponse(lines(), media_type=NDJSON)


@router.get(
    "",
    response_model=PageOf[BatchView],
    responses=documented(401, 403, 422, 429, 503),
    operation_id="list_batches",
    summary="List batches",
)
def get_batches(context: Ctx, caller: CallerDep, cursor: Cursor = None, limit: Limit = None) -> Response:
    """Batches, newest first."""
    page = list_batches(context.database, caller, before=position(cursor), limit=context.page_size(limit))
    items = [batch_view(one) for one in page.items]
    return json_response({"items": items, "next_cursor": cursor_of(page.after)})
