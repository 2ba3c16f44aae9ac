"""Datasets: posting and reading back."""

import hashlib
from typing import Annotated, Literal

from fastapi import APIRouter, Depends, Query, Request
from starlette.responses import Response

from service.store.records import DatasetContent
from service.web.answers import json_response
from service.web.callers import CallerDep
from service.web.conditional import conditional
from service.web.context import Ctx
from service.web.openapi import takes
from service.web.openapi_details import NOT_MODIFIED
from service.web.paging import Cursor, Limit, cursor_of, position
from service.web.posted import CSV, PARQUET, posted_dataset
from service.web.problems import documented
from service.web.schemas.common import Identifier, Label, PageOf
from service.web.schemas.datasets import DatasetBody, DatasetView, dataset_view
from service.workflows.read import list_datasets, read_dataset
from service.workflows.submit import post_dataset as store_dataset

router = APIRouter(prefix="/v1/datasets", tags=["datasets"])


@router.post(
    "",
    status_code=201,
    response_model=DatasetView,
    responses=documented(
        *(400, 401, 403, 413, 415, 422, 429, 503),
        also={200: {"model": DatasetView, "description": "Stored before: the same content"}},
    ),
    operation_id="post_dataset",
    openapi_extra=takes(DatasetBody, CSV, PARQUET),
    summary="Store a dataset",
)
def post_dataset(
    context: Ctx, caller: CallerDep, posted: Annotated[tuple[DatasetContent, int], Depends(posted_dataset)]
) -> Response:
    """Store one calibration. The same content again answers 200 with the same id.

    As JSON; or as a table in CSV (a header, comma or semicolon, decimal point) or Apache Parquet, with columns x, y and
    perhaps u_x, u_y and series; the query then says what it calibrates.
    """
    content, most = posted
    record, new = store_dataset(context.database, caller, content, most=most, now=context.now())
    headers = {"Location": f"/v1/datasets/{record.id}"}
    return json_response(dataset_view(record), status=201 if new else 200, headers=headers)


@router.get(
    "/{dataset_id}",
    response_model=DatasetView,
    responses=documented(401, 403, 404, 409, 422, 429, 503, also=NOT_MODIFIED),
    operation_id="get_dataset",
    summary="Read a dataset",
)
def get_dataset(
    request: Request,
    context: Ctx,
    caller: CallerDep,
    dataset_id: Identifier,
    include: Annotated[Literal["points"] | None, Query(description="`points` for the numbers.")] = None,
) -> Response:
    """What is known of a dataset, and its numbers if asked: 409 `dataset_purged` once retention has removed those."""
    record, content = read_dataset(context.database, caller, dataset_id, points=include == "points")
    answer = json_response(dataset_view(record, content))
    return conditional(request, hashlib.sha256(answer.body).hexdigest(), answer)  # `created_at` may change


@router.get(
    "",
    response_model=PageOf[DatasetView],
    responses=documented(401, 403, 422, 429, 503),
    operation_id="list_datasets",
    summary="List datasets",
)
def get_datasets(
    context: Ctx,
    caller: CallerDep,
    subject: Annotated[Label | None, Query(description="Only of this subject.")] = None,
    cursor: Cursor = None,
    limit: Limit = None,
) -> Response:
    """Datasets without their numbers, newest first."""
    page = list_datasets(
        context.database, caller, subject=subject, before=position(cursor), limit=context.page_size(limit)
    )
    items = [dataset_view(record) for record in page.items]
    return json_response({"items": items, "next_cursor": cursor_of(page.after)})
