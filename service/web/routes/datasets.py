"""Datasets: posting and reading back."""

from typing import Annotated, Literal

from fastapi import APIRouter, Depends, Query
from starlette.responses import Response

from service.web.answers import json_response
from service.web.context import Ctx
from service.web.openapi import takes
from service.web.paging import cursor_of, position
from service.web.problems import documented
from service.web.schemas.common import Label, PageOf
from service.web.schemas.datasets import DatasetBody, DatasetView, dataset_view
from service.web.strict_json import json_body
from service.workflows.read import list_datasets, read_dataset
from service.workflows.submit import post_dataset as store_dataset

router = APIRouter(prefix="/v1/datasets", tags=["datasets"])


@router.post(
    "",
    status_code=201,
    response_model=DatasetView,
    responses=documented(
        400, 413, 415, 422, 503, also={200: {"model": DatasetView, "description": "Stored before: the same content"}}
    ),
    operation_id="post_dataset",
    openapi_extra=takes(DatasetBody),
    summary="Store a dataset",
)
def post_dataset(context: Ctx, body: Annotated[DatasetBody, Depends(json_body(DatasetBody))]) -> Response:
    """Store one calibration. The same content again answers 200 with the same id."""
    record, new = store_dataset(context.database, context.settings, body.content(), now=context.now())
    headers = {"Location": f"/v1/datasets/{record.id}"}
    return json_response(dataset_view(record), status=201 if new else 200, headers=headers)


@router.get(
    "/{dataset_id}",
    response_model=DatasetView,
    responses=documented(404, 422, 503),
    operation_id="get_dataset",
    summary="Read a dataset",
)
def get_dataset(
    context: Ctx,
    dataset_id: str,
    include: Annotated[Literal["points"] | None, Query(description="`points` for the numbers.")] = None,
) -> Response:
    """What is known of a dataset, and its numbers if asked."""
    record, content = read_dataset(context.database, dataset_id, points=include == "points")
    return json_response(dataset_view(record, content))


@router.get(
    "",
    response_model=PageOf[DatasetView],
    responses=documented(422, 503),
    operation_id="list_datasets",
    summary="List datasets",
)
def get_datasets(
    context: Ctx,
    subject: Annotated[Label | None, Query(description="Only of this subject.")] = None,
    cursor: Annotated[str | None, Query(description="`next_cursor` of the page before.")] = None,
    limit: Annotated[int, Query(ge=1, le=200, description="Most items on the page.")] = 50,
) -> Response:
    """Datasets without their numbers, newest first."""
    page = list_datasets(
        context.database,
        subject=subject,
        before=position(cursor),
        limit=min(limit, context.settings.page_limit),
    )
    return json_response(
        {"items": [dataset_view(record) for record in page.items], "next_cursor": cursor_of(page.after)}
    )
