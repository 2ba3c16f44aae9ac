"""Liveness and readiness."""

from typing import Literal

from fastapi import APIRouter
from starlette.responses import Response

from service.errors import Overloaded
from service.store.migrate import is_current
from service.web.answers import json_response
from service.web.context import Ctx
from service.web.problems import documented
from service.web.schemas.common import Answer

router = APIRouter(tags=["operations"])


class Health(Answer):
    """The process answers."""

    status: Literal["ok"]


class Readiness(Answer):
    """The service can take and serve jobs."""

    status: Literal["ready"]
    queue_messages: int


@router.get("/healthz", response_model=Health, operation_id="get_health", summary="Liveness")
def get_health() -> Response:
    """The process is up. Asks nothing of database or queue."""
    return json_response({"status": "ok"})


@router.get(
    "/readyz",
    response_model=Readiness,
    responses=documented(503),
    operation_id="get_readiness",
    summary="Readiness",
)
def get_readiness(context: Ctx) -> Response:
    """Database and queue answer, and the database is at the revision this version knows."""
    if not is_current(context.database):
        raise Overloaded("the database is not at this version's revision", retry_after=5, code="not_migrated")
    size = context.transport.size()
    if size is None:
        raise Overloaded("the queue does not answer", retry_after=5, code="queue_away")
    return json_response({"status": "ready", "queue_messages": size})
