"""One job: the verdict in words first, then everything behind it; its figures, its report, its end."""

import json
from dataclasses import dataclass
from typing import Annotated, Any

from fastapi import APIRouter, Path, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from service.store.clock import rfc3339
from service.store.records import DatasetRecord
from service.store.tables import FINAL
from service.web.answers import json_response
from service.web.context import Context, Ctx
from service.web.figures.data import figure_data
from service.web.figures.names import TITLES, FigureFormat, FigureName
from service.web.figures.words import alt_text
from service.web.pages import words
from service.web.pages.page_route import PageRoute
from service.web.pages.show import show
from service.web.pages.visitors import VisitorDep, read_form
from service.web.routes.figures import figure_response
from service.web.schemas.datasets import dataset_view
from service.web.schemas.jobs import job_document, job_summary
from service.workflows.callers import Caller
from service.workflows.cancel import cancel_job
from service.workflows.figures import figure_inputs
from service.workflows.read import read_dataset, read_events, read_job, read_verdict

router = APIRouter(route_class=PageRoute, include_in_schema=False)
IN_REPORT: tuple[FigureName, ...] = ("curve", "degrees", "residuals", "unseen")


@dataclass(frozen=True, kw_only=True, slots=True)
class FigureItem:
    """One figure on a page."""

    name: str
    title: str
    alt: str
    reading: str


@dataclass(frozen=True, kw_only=True, slots=True)
class JobPage:
    """job.html and report.html. `job`: what GET /v1/jobs/{id} answers, from which every number on the page is taken.

    `verdict`: what GET /v1/jobs/{id}/verdict answers, with its digest; both None before there is one. `dataset`: as
    GET /v1/datasets/{id} answers it without points. `events`: kind, time and detail, oldest first.
    """

    job: dict[str, Any]
    dataset: dict[str, Any]
    verdict: dict[str, Any] | None
    verdict_digest: str | None
    events: list[dict[str, Any]]
    figures: list[FigureItem]
    ended: bool
    may_cancel: bool


@router.get("/job/{job_id}")
async def job(request: Request, context: Ctx, visitor: VisitorDep, job_id: str) -> Response:
    """Everything about one job."""
    page = await run_in_threadpool(_gather, context, visitor.caller, job_id, tuple(TITLES))
    return show(request, visitor, "job.html", page)


@router.get("/job/{job_id}/report")
async def report(request: Request, context: Ctx, visitor: VisitorDep, job_id: str) -> Response:
    """The same for paper."""
    page = await run_in_threadpool(_gather, context, visitor.caller, job_id, IN_REPORT)
    return show(request, visitor, "report.html" if page.verdict is not None else "job.html", page)


@router.get("/job/{job_id}/state")
async def state(context: Ctx, visitor: VisitorDep, job_id: str) -> Response:
    """What the live update asks."""
    found, _ = await run_in_threadpool(read_events, context.database, visitor.caller, job_id)
    summary = job_summary(found)
    return json_response({"state": summary["state"], "progress": summary["progress"], "ended": found.state in FINAL})


@router.get("/job/{job_id}/figures/{name}.{kind}")
async def figure(
    request: Request,
    context: Ctx,
    visitor: VisitorDep,
    job_id: str,
    name: Annotated[FigureName, Path()],
    kind: Annotated[FigureFormat, Path()],
) -> Response:
    """A figure for who is signed in."""
    return await figure_response(request, context, visitor.caller, job_id, name, kind)


@router.post("/job/{job_id}/cancel")
async def cancel(request: Request, context: Ctx, visitor: VisitorDep, job_id: str) -> Response:
    """Call it off."""
    await read_form(request, visitor.secret)
    caller = visitor.caller
    caller.must_submit()
    await run_in_threadpool(read_job, context.database, caller, job_id)  # who may not see it does not find it
    await run_in_threadpool(cancel_job, context.database, job_id, by=caller.name, now=context.now())
    return RedirectResponse(f"/job/{job_id}", status_code=303)


def _gather(context: Context, caller: Caller, job_id: str, shown: tuple[FigureName, ...]) -> JobPage:
    detail, notification = read_job(context.database, caller, job_id)
    _, happened = read_events(context.database, caller, job_id)
    record, _ = read_dataset(context.database, caller, detail.job.dataset_id)
    figures: list[FigureItem] = []
    verdict, digest = None, None
    if detail.result is not None:
        content, _ = figure_inputs(context.database, caller, job_id)
        data = figure_data(content, subject=detail.job.subject, plan=detail.plan, result=detail.result)
        figures = [
            FigureItem(name=name, title=TITLES[name], alt=alt_text(name, data), reading=words.FIGURES[name])
            for name in shown
        ]
        found = read_verdict(context.database, caller, job_id)
        verdict, digest = json.loads(found.document), found.digest
    document = json.loads(job_document(detail, notification))
    ended = detail.job.state in FINAL
    return JobPage(
        job=document,
        dataset=_dataset(record),
        verdict=verdict,
        verdict_digest=digest,
        events=[{"kind": one.kind, "at": rfc3339(one.at), "detail": one.detail} for one in happened],
        figures=figures,
        ended=ended,
        may_cancel=not ended and caller.role != "read",
    )


def _dataset(record: DatasetRecord) -> dict[str, Any]:
    return dataset_view(record)
