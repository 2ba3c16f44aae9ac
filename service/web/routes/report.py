"""The report of a job as PDF."""

import hashlib

from fastapi import APIRouter, Request
from starlette.responses import Response

from service.errors import NotFound
from service.web.callers import CallerDep
from service.web.conditional import conditional
from service.web.context import Context, Ctx
from service.web.figures.names import FigureName
from service.web.pages.gather import gather
from service.web.problems import documented
from service.web.schemas.common import Identifier
from service.workflows.callers import Caller

router = APIRouter(prefix="/v1/jobs", tags=["figures"])
PDF = "application/pdf"
SHOWN: tuple[FigureName, ...] = ("curve", "degrees", "residuals", "unseen")


@router.get(
    "/{job_id}/report.pdf",
    response_class=Response,
    responses=documented(
        *(401, 403, 404, 422, 429, 503),
        also={
            200: {"description": "The report, A4", "content": {PDF: {"schema": {"type": "string"}}}},
            304: {"description": "Not changed since the ETag given in If-None-Match"},
        },
    ),
    operation_id="get_report",
    summary="Report of a job as PDF",
)
async def get_report(request: Request, context: Ctx, caller: CallerDep, job_id: Identifier) -> Response:
    """Verdict, figures, curve, requirements, candidates, warnings, digests and cautions on two or three pages.

    404 `result_not_ready` until the job has ended, `no_result` if it ended without one.
    """
    return await report_response(request, context, caller, job_id)


async def report_response(request: Request, context: Context, caller: Caller, job_id: str) -> Response:
    """The report, made in the thread that draws. Raises NotFound."""

    def make() -> bytes:
        # As with matplotlib: a service that makes no report does not load what makes one.
        from service.web.report.document import report_pdf  # noqa: PLC0415

        figures = {name: context.drawing.make_now(caller, job_id, name, "png").data for name in SHOWN}
        page = gather(context, caller, job_id, SHOWN)
        if page.verdict is None:
            raise NotFound(f"job {job_id} has no result", code="no_result")
        return report_pdf(page, figures)

    made = await context.drawing.run(make)
    answer = conditional(request, hashlib.sha256(made).hexdigest(), Response(made, media_type=PDF))
    answer.headers["Content-Disposition"] = f'inline; filename="report-{job_id[:36]}.pdf"'
    answer.headers["Cache-Control"] = "private, no-cache"
    return answer
