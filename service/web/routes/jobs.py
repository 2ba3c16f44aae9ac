"""Jobs: putting one in, reading one, the history, calling one off."""

import hashlib
from typing import Annotated

from fastapi import APIRouter, Depends, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from service.store.records import JobDetail, JobFilter, NotificationRecord
from service.store.tables import FINAL, State
from service.web.answers import document_response, json_response
from service.web.callers import CallerDep
from service.web.conditional import conditional
from service.web.context import Context, Ctx
from service.web.idempotency import IdempotencyKey, repeat_key
from service.web.openapi import takes
from service.web.openapi_details import NOT_MODIFIED
from service.web.paging import Cursor, Limit, cursor_of, position
from service.web.prefer import Prefer, applied, preferences, seconds_to_wait
from service.web.problems import documented
from service.web.schemas.common import DIGEST, Identifier, Label, Moment, PageOf
from service.web.schemas.jobs import JobBody, JobSummary, JobView, StateWord, VerdictWord, job_document, job_summary
from service.web.strict_json import json_body
from service.workflows.callers import Caller
from service.workflows.cancel import cancel_job
from service.workflows.read import list_jobs, read_job
from service.workflows.submit import Submission, submit_job

router = APIRouter(prefix="/v1/jobs", tags=["jobs"])
RETRY_AFTER = "1"


@router.post(
    "",
    status_code=202,
    response_model=JobView,
    responses=documented(
        *(400, 401, 403, 409, 413, 415, 422, 429, 503),
        also={200: {"model": JobView, "description": "Ended within the wait that was asked for"}},
    ),
    operation_id="post_job",
    openapi_extra=takes(JobBody),
    summary="Fit and select",
)
async def post_job(
    request: Request,
    context: Ctx,
    caller: CallerDep,
    body: Annotated[JobBody, Depends(json_body(JobBody))],
    key: IdempotencyKey = None,
    prefer: Prefer = None,  # noqa: ARG001  (stands in the document; read from the request, where it may come twice)
) -> Response:
    """Queue one fit-and-select of a dataset under a plan.

    With `Prefer: wait=N` (RFC 7240) the answer comes when the job has ended, or after N seconds. 409 `dataset_purged`
    if retention has removed the points of the dataset named by its id.
    """
    detail, notification = await run_in_threadpool(_submit, context, caller, body, repeat_key(key))
    job_id = request.state.job_id = detail.job.id  # for the log
    preferred = preferences(request.headers.getlist("prefer"))
    seconds = seconds_to_wait(preferred, most=context.settings.wait_seconds)
    if seconds and detail.job.state not in FINAL:
        await context.waiting.until_ended(job_id, seconds, gone=request.receive)
        detail, notification = await run_in_threadpool(read_job, context.database, caller, job_id)
    ended = detail.job.state in FINAL
    headers = {"Location": f"/v1/jobs/{job_id}"}
    if not ended:
        headers["Retry-After"] = RETRY_AFTER
    followed = applied(preferred, seconds)
    if followed is not None:
        headers["Preference-Applied"] = followed
    status = 200 if ended and seconds is not None else 202
    return document_response(job_document(detail, notification), status, headers)


def _submit(
    context: Context, caller: Caller, body: JobBody, key: str | None
) -> tuple[JobDetail, NotificationRecord | None]:
    asked = Submission(
        plan=None if body.plan is None else body.plan.plan("/plan"),
        plan_id=body.plan_id,
        dataset_id=body.dataset_id,
        dataset=None if body.dataset is None else body.dataset.content(),
        subject=body.subject,
        priority=body.priority,
        notify_url=body.notify_url,
    )
    now = context.now()
    return submit_job(context.database, context.transport, context.settings, caller, asked, repeat_key=key, now=now)


@router.get(
    "/{job_id}",
    response_model=JobView,
    responses=documented(401, 403, 404, 422, 429, 503, also=NOT_MODIFIED),
    operation_id="get_job",
    summary="Read a job",
)
def get_job(request: Request, context: Ctx, caller: CallerDep, job_id: Identifier) -> Response:
    """State and progress; once it has ended, `result` or `error`."""
    detail, notification = read_job(context.database, caller, job_id)
    document = job_document(detail, notification)
    headers = {} if detail.job.state in FINAL else {"Retry-After": RETRY_AFTER}
    tag = hashlib.sha256(document).hexdigest()
    return conditional(request, tag, document_response(document, headers=headers))


@router.get(
    "",
    response_model=PageOf[JobSummary],
    responses=documented(401, 403, 422, 429, 503),
    operation_id="list_jobs",
    summary="History of jobs",
)
def get_jobs(
    context: Ctx,
    caller: CallerDep,
    subject: Annotated[Label | None, Query()] = None,
    state: Annotated[StateWord | None, Query()] = None,
    verdict: Annotated[VerdictWord | None, Query()] = None,
    submitted_by: Annotated[Label | None, Query(description="Name of the key that submitted it.")] = None,
    since: Annotated[Moment | None, Query(description="Queued at this time or later.")] = None,
    until: Annotated[Moment | None, Query(description="Queued before this time.")] = None,
    plan: Annotated[str | None, Query(pattern=DIGEST, description="Digest of the plan, not its name.")] = None,
    cursor: Cursor = None,
    limit: Limit = None,
) -> Response:
    """Jobs without their results, newest first."""
    wanted = JobFilter(
        subject=subject,
        state=None if state is None else State(state),
        verdict=verdict,
        submitted_by=submitted_by,
        since=since,
        until=until,
        plan_digest=plan,
    )
    page = list_jobs(context.database, caller, wanted, before=position(cursor), limit=context.page_size(limit))
    return json_response({"items": [job_summary(job) for job in page.items], "next_cursor": cursor_of(page.after)})


@router.delete(
    "/{job_id}",
    response_model=JobSummary,
    responses=documented(401, 403, 404, 409, 422, 429, 503),
    operation_id="cancel_job",
    summary="Cancel a job",
)
def delete_job(context: Ctx, caller: CallerDep, job_id: Identifier) -> Response:
    """Cancel: at once if it waits, within 2 s if it runs. Its dataset, plan and events are kept."""
    caller.must_submit()
    read_job(context.database, caller, job_id)  # who may not see it does not find it
    job = cancel_job(context.database, job_id, by=caller.name, now=context.now())
    return json_response(job_summary(job))
