"""What happens to a job, as it happens: server-sent events until it ends."""

from collections.abc import AsyncIterator
from typing import Annotated, Any

from fastapi import APIRouter, Depends, Header
from fastapi.sse import EventSourceResponse, ServerSentEvent
from starlette.concurrency import run_in_threadpool

from service.store.clock import rfc3339
from service.store.records import EventRecord
from service.store.tables import FINAL
from service.web.callers import CallerDep
from service.web.context import Ctx
from service.web.problems import documented
from service.web.schemas.common import Identifier
from service.web.waiting import Stopping
from service.workflows.callers import Caller
from service.workflows.read import read_events

router = APIRouter(prefix="/v1/jobs", tags=["jobs"])
EVENT = {
    "type": "object",
    "properties": {
        "event": {
            "type": "string",
            "enum": ["queued", "started", "requeued", "succeeded", "failed", "cancelled", "purged", "progress"],
        },
        "id": {"type": "string", "description": "Send it as Last-Event-ID to go on behind it; `progress` has none."},
        "data": {"type": "string", "contentMediaType": "application/json"},
    },
    "required": ["event", "data"],
}


def _exists(context: Ctx, caller: CallerDep, job_id: Identifier) -> Caller:
    """Refuses before the stream begins, while there can still be a status."""
    read_events(context.database, caller, job_id)
    return caller


@router.get(
    "/{job_id}/events",
    response_class=EventSourceResponse,
    responses=documented(
        *(401, 403, 404, 422, 429, 503),
        also={
            200: {
                "description": "One event after the other; the schema is that of one",
                "content": {"text/event-stream": {"schema": EVENT}},
            }
        },
    ),
    operation_id="get_job_events",
    summary="Follow a job",
)
async def get_job_events(
    context: Ctx,
    job_id: Identifier,
    caller: Annotated[Caller, Depends(_exists)],
    last_event_id: Annotated[
        int, Header(alias="Last-Event-ID", ge=0, le=2**62, description="Go on behind this event.")
    ] = 0,
) -> AsyncIterator[ServerSentEvent]:
    """Server-sent events: `queued`, `started`, `requeued`, `succeeded`, `failed`, `cancelled` as they are recorded,
    each with an id to go on from, and `progress` in between. The stream ends with the job. Of an old job whose events
    retention has removed there is `purged` alone.
    """
    seen = last_event_id
    async with context.waiting.watching(job_id) as changes:
        while True:
            job, events = await run_in_threadpool(read_events, context.database, caller, job_id, after=seen)
            for event in events:
                seen = event.id
                yield ServerSentEvent(data=_data(event), event=event.kind, id=str(event.id))
            if job.state in FINAL:
                return
            if job.stage is not None:
                progress = {"stage": job.stage, "done": job.stage_done, "of": job.stage_of}
                yield ServerSentEvent(data=progress, event="progress")
            try:
                await changes.next()
            except Stopping:  # the caller's library connects again, with Last-Event-ID
                return


def _data(event: EventRecord) -> dict[str, Any]:
    return {"at": rfc3339(event.at), **event.detail}
