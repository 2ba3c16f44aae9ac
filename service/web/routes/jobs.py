"""Jobs: putting one in, reading one, the history, the verdict."""

from typing import Annotated

from fastapi import APIRouter, Depends, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from service.core.plan import Plan
from service.store.records import JobFilter
from service.store.tables import FINAL, State
from service.web.answers import document_response, json_response
from service.web.context import Context, Ctx
from service.web.openapi import takes
from service.web.paging import cursor_of, position
from service.web.prefer import seconds_to_wait
from service.web.problems import documented
from service.web.schemas.common import Label, Moment, PageOf
from service.web.schemas.jobs import (
    JobBody,
    JobSummary,
    JobView,
    StateWord,
    Verdict,
    VerdictWord,
    job_document,
    job_summary,
)
from service.web.strict_json import json_body
from service.workflows.read import list_jobs, read_job, read_verdict
from service.workflows.submit import Submission, submit_job

router = APIRouter(prefix="/v1/jobs", tags=["jobs"])
RETRY_AFTER = "1"


@router.post(
    "",
    status_code=202,
    response_model=JobView,
    responses=documented(
        400, 413, 415, 422, 503, also={200: {"model": JobView, "description": "Ended within the wait asked for"}}
    ),
    operation_id="post_job",
    openapi_extra=takes(JobBody),
    summary="Fit and select",
)
async def post_job(request: Request, context: Ctx, body: Annotated[JobBody, Depends(json_body(JobBody))]) -> Response:
    """Queue one fit-and-select of a dataset under a plan.

    With `Prefer: wait=N` (RFC 7240) the answer comes when the job has ended, or after N seconds.
    """
    job_id = await run_in_threadpool(_submit, context, body)
    seconds = seconds_to_wait(request.headers.getlist("prefer"), most=context.settings.wait_seconds)
    if seconds:
        await context.waiting.until_ended(job_id, seconds)
    detail = await run_in_threadpool(read_job, context.database, job_id)
    ended = detail.job.state in FINAL
    headers = {"Location": f"/v1/jobs/{job_id}"}
    if not ended:
        headers["Retry-After"] = RETRY_AFTER
    if seconds is not None:
        headers["Preference-Applied"] = f"wait={seconds:g}"
    return document_response(job_document(detail), 200 if ended and seconds is not None else 202, headers)


def _submit(context: Context, body: JobBody) -> str:
    asked = Submission(
        submitted_by="local",
        plan=Plan() if body.plan is None else body.plan.plan("/plan"),
        dataset_id=body.dataset_id,
        dataset=None if body.dataset is None else body.dataset.content(),
        subject=body.subject,
        priority=body.priority,
    )
    return submit_job(context.database, context.transport, context.settings, asked, now=context.now())


@router.get(
    "/{job_id}",
    response_model=JobView,
    responses=documented(404, 503),
    operation_id="get_job",
    summary="Read a job",
)
def get_job(context: Ctx, job_id: str) -> Response:
    """State and progress; once it has ended, `result` or `error`."""
    detail = read_job(context.database, job_id)
    headers = {} if detail.job.state in FINAL else {"Retry-After": RETRY_AFTER}
    return document_response(job_document(detail), headers=headers)


@router.get(
    "",
    response_model=PageOf[JobSummary],
    responses=documented(422, 503),
    operation_id="list_jobs",
    summary="History of jobs",
)
def get_jobs(
    context: Ctx,
    subject: Annotated[Label | None, Query()] = None,
    state: Annotated[StateWord | None, Query()] = None,
    verdict: Annotated[VerdictWord | None, Query()] = None,
    submitted_by: Annotated[Label | None, Query(description="Name of the key that submitted it.")] = None,
    since: Annotated[Moment | None, Query(description="Queued at this time or later.")] = None,
    until: Annotated[Moment | None, Query(description="Queued before this time.")] = None,
    cursor: Annotated[str | None, Query(description="`next_cursor` of the page before.")] = None,
    limit: Annotated[int, Query(ge=1, le=200, description="Most items on the page.")] = 50,
) -> Response:
    """Jobs without their results, newest first."""
    wanted = JobFilter(
        subject=subject,
        state=None if state is None else State(state),
        verdict=verdict,
        submitted_by=submitted_by,
        since=since,
        until=until,
    )
    page = list_jobs(context.database, wanted, before=position(cursor), limit=min(limit, context.settings.page_limit))
    return json_response({"items": [job_summary(job) for job in page.items], "next_cursor": cursor_of(page.after)})


@router.get(
    "/{job_id}/verdict",
    response_model=Verdict,
    responses=documented(404, 503),
    operation_id="get_verdict",
    summary="Read a job's verdict",
)
def get_verdict(context: Ctx, job_id: str) -> Response:
    """The canonical document (RFC 8785) whose SHA-256 is in the ETag. 404 `verdict_not_ready` until the job ended."""
    verdict = read_verdict(context.database, job_id)
    return document_response(verdict.document.encode(), headers={"ETag": f'"{verdict.digest}"'})
