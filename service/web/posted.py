"""A dataset as it was posted: JSON, CSV or Parquet."""

from typing import Annotated, Any

from fastapi import Query, Request
from pydantic import ConfigDict
from starlette.concurrency import run_in_threadpool

from service.errors import FieldError, InvalidInput
from service.store.clock import rfc3339
from service.store.records import DatasetContent
from service.web.context import Ctx
from service.web.parquet import read_parquet
from service.web.schemas.common import Body, Finite, Label, Line, Moment, given
from service.web.schemas.datasets import DETAILS, DatasetBody
from service.web.strict_json import demand_type, read_as, read_body
from service.web.tables import read_csv

JSON, CSV, PARQUET = "application/json", "text/csv", "application/vnd.apache.parquet"


class TableQuery(Body):
    """What is said of a dataset whose body is a table."""

    model_config = ConfigDict(extra="forbid", strict=False, frozen=True)

    subject: Label | None = None
    title: Line | None = None
    x_quantity: Line | None = None
    x_unit: Line | None = None
    y_quantity: Line | None = None
    y_unit: Line | None = None
    level_tolerance: Finite | None = Query(None, ge=0)
    measured_at: Moment | None = None


async def posted_dataset(
    request: Request, context: Ctx, query: Annotated[TableQuery, Query()]
) -> tuple[DatasetContent, int]:
    """The dataset, and the most points that its form may have. With a table, the query says what it is of."""
    kind = demand_type(request, JSON, CSV, PARQUET)
    said = query.model_dump(exclude_none=True)
    if kind == JSON:
        if said:
            where = "belongs into the body when that is JSON"
            raise InvalidInput([FieldError(f"/query/{name}", where) for name in said])
        body = await run_in_threadpool(read_as, DatasetBody, await read_body(request))
        return body.content(), context.settings.points
    if query.subject is None:
        raise InvalidInput.at("/query/subject", "is missing: a table does not say what it calibrates")
    details = _details(query)
    body_bytes = await read_body(request)
    if kind == CSV:
        content = await run_in_threadpool(read_csv, body_bytes, subject=query.subject, details=details)
        return content, context.settings.points
    most = context.settings.parquet_points
    content = await run_in_threadpool(read_parquet, body_bytes, most=most, subject=query.subject, details=details)
    return content, most


def _details(query: TableQuery) -> dict[str, Any]:
    details = given(query, *DETAILS)
    if query.measured_at is not None:
        details["measured_at"] = rfc3339(query.measured_at)
    return details
