"""Verdicts: of one job, and all of them in the order of issue, for polling."""

import json
from typing import Annotated

from fastapi import APIRouter, Query, Request
from starlette.responses import Response

from service.errors import InvalidInput
from service.store.records import VerdictFilter
from service.web.answers import document_response
from service.web.callers import CallerDep
from service.web.conditional import conditional
from service.web.context import Ctx
from service.web.openapi_details import NOT_MODIFIED
from service.web.paging import Cursor, Limit, cursor_of, position
from service.web.problems import documented
from service.web.schemas.common import Identifier, Label, Moment, PageOf
from service.web.schemas.jobs import Verdict, VerdictWord
from service.workflows.read import list_verdicts, read_verdict

router = APIRouter(tags=["verdicts"])


@router.get(
    "/v1/jobs/{job_id}/verdict",
    response_model=Verdict,
    responses=documented(401, 403, 404, 422, 429, 503, also=NOT_MODIFIED),
    operation_id="get_verdict",
    summary="Read a job's verdict",
)
def get_verdict(request: Request, context: Ctx, caller: CallerDep, job_id: Identifier) -> Response:
    """The canonical document (RFC 8785) whose SHA-256 is the ETag. 404 `verdict_not_ready` until the job has ended."""
    verdict = read_verdict(context.database, caller, job_id)
    return conditional(request, verdict.digest, document_response(verdict.document.encode()))


@router.get(
    "/v1/verdicts",
    response_model=PageOf[Verdict],
    responses=documented(401, 403, 422, 429, 503),
    operation_id="list_verdicts",
    summary="Verdicts in the order of issue",
)
def get_verdicts(
    context: Ctx,
    caller: CallerDep,
    subject: Annotated[Label | None, Query()] = None,
    verdict: Annotated[VerdictWord | None, Query()] = None,
    since: Annotated[Moment | None, Query(description="Issued at this time or later.")] = None,
    newest_only: Annotated[bool, Query(description="Only the newest verdict of each subject.")] = False,
    cursor: Cursor = None,
    limit: Limit = None,
) -> Response:
    """Oldest first, made for polling: keep `next_cursor`, which is given as long as anything was ever answered, and ask
    again with it later; what has been issued since comes then, nothing twice and nothing left out.
    """
    after = _sequence(cursor)
    wanted = VerdictFilter(subject=subject, verdict=verdict, since=since, newest_only=newest_only)
    found = list_verdicts(context.database, caller, wanted, after=after, limit=context.page_size(limit))
    last = found[-1].sequence if found else after
    items = ",".join(one.document for one in found)
    following = json.dumps(cursor_of(str(last)) if last else None)
    return document_response(f'{{"items":[{items}],"next_cursor":{following}}}'.encode())


def _sequence(cursor: str | None) -> int:
    last = position(cursor)
    if last is None:
        return 0
    if not last.isdigit() or len(last) > 18:
        raise InvalidInput.at("/query/cursor", "is not a next_cursor of this list")
    return int(last)
