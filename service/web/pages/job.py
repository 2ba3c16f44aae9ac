"""One job: the verdict in words first, then everything behind it; its figures, its report, its end."""

from typing import Annotated

from fastapi import APIRouter, Path, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from service.store.tables import FINAL
from service.web.answers import json_response
from service.web.context import Ctx
from service.web.figures.names import TITLES, FigureFormat, FigureName
from service.web.pages.gather import gather
from service.web.pages.page_route import PageRoute
from service.web.pages.show import show
from service.web.pages.visitors import VisitorDep, read_form
from service.web.routes.figures import figure_response
from service.web.routes.report import report_response
from service.web.schemas.jobs import job_summary
from service.workflows.cancel import cancel_job
from service.workflows.read import read_events, read_job

router = APIRouter(route_class=PageRoute, include_in_schema=False)
IN_REPORT: tuple[FigureName, ...] = ("curve", "degrees", "residuals", "unseen")


@router.get("/job/{job_id}")
async def job(request: Request, context: Ctx, visitor: VisitorDep, job_id: str) -> Response:
    """Everything about one job."""
    page = await run_in_threadpool(gather, context, visitor.caller, job_id, tuple(TITLES), readings=False)
    return show(request, visitor, "job.html", page)


@router.get("/job/{job_id}/report")
async def report(request: Request, context: Ctx, visitor: VisitorDep, job_id: str) -> Response:
    """The same for paper."""
    page = await run_in_threadpool(gather, context, visitor.caller, job_id, IN_REPORT)
    return show(request, visitor, "report.html" if page.job["result"] is not None else "job.html", page)


@router.get("/job/{job_id}/report.pdf")
async def report_pdf(request: Request, context: Ctx, visitor: VisitorDep, job_id: str) -> Response:
    """The same as a file."""
    return await report_response(request, context, visitor.caller, job_id)


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
