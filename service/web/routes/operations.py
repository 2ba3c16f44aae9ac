"""Liveness, readiness, metrics."""

from typing import Any, Literal

from fastapi import APIRouter, Depends
from starlette.responses import Response

from service.errors import Forbidden, Overloaded
from service.store.migrate import is_current
from service.web.answers import json_response
from service.web.callers import CallerDep
from service.web.context import Ctx
from service.web.problems import documented
from service.web.queries import demand_known_query
from service.web.schemas.common import Answer

router = APIRouter(tags=["operations"])
NO_KEY: dict[str, Any] = {"security": []}
TEXT_FORMAT = "text/plain; version=0.0.4; charset=utf-8"


class Health(Answer):
    """The process answers."""

    status: Literal["ok"]


class Readiness(Answer):
    """The service can take and serve jobs."""

    status: Literal["ready"]
    queue_messages: int


@router.get(
    "/healthz",
    response_model=Health,
    responses=documented(422),
    dependencies=[Depends(demand_known_query)],
    openapi_extra=NO_KEY,
    operation_id="get_health",
    summary="Liveness",
)
def get_health() -> Response:
    """The process is up. Asks nothing of database or queue, and needs no key."""
    return json_response({"status": "ok"})


@router.get(
    "/readyz",
    response_model=Readiness,
    responses=documented(422, 503),
    dependencies=[Depends(demand_known_query)],
    openapi_extra=NO_KEY,
    operation_id="get_readiness",
    summary="Readiness",
)
def get_readiness(context: Ctx) -> Response:
    """Database and queue answer, and the database is at the revision this version knows. Needs no key."""
    if not is_current(context.database):
        raise Overloaded("the database is not at this version's revision", retry_after=5, code="not_migrated")
    size = context.transport.size()
    if size is None:
        raise Overloaded("the queue does not answer", retry_after=5, code="queue_away")
    return json_response({"status": "ready", "queue_messages": size})


@router.get(
    "/metrics",
    response_class=Response,
    responses=documented(
        *(401, 403, 422, 429, 503),
        also={200: {"description": "Text format 0.0.4", "content": {"text/plain": {"schema": {"type": "string"}}}}},
    ),
    operation_id="get_metrics",
    summary="Prometheus metrics",
)
def get_metrics(context: Ctx, caller: CallerDep) -> Response:
    """Requests, queue, job durations by stage, verdicts. Not for `submit` keys, which see only their own."""
    if caller.only_own is not None:
        raise Forbidden("metrics are of every submitter: a read or admin key is needed")
    return Response(context.metrics.exposition(context.database, context.now), media_type=TEXT_FORMAT)
