"""Figures of a job as SVG and PNG."""

from typing import Annotated

from fastapi import APIRouter, Path, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from service.web.callers import CallerDep
from service.web.conditional import conditional
from service.web.context import Context, Ctx
from service.web.figures.names import MEDIA_TYPES, FigureFormat, FigureName
from service.web.problems import Responses, documented
from service.web.schemas.common import Identifier
from service.workflows.callers import Caller

router = APIRouter(prefix="/v1/jobs", tags=["figures"])
FOR_A_DAY = "private, max-age=86400"
DRAWN_ONLY = "default-src 'none'; style-src 'unsafe-inline'; sandbox"
"""An SVG opened by itself may use the styles inside it, and nothing else."""

NAME = Path(description="Which figure: what each shows is in its `desc` and on the job's page.")


def _drawn(media_type: str) -> Responses:
    """`responses` of a call that answers with a picture."""
    picture = {"description": "The figure", "content": {media_type: {"schema": {"type": "string"}}}}
    unchanged = {"description": "Not changed since the ETag given in If-None-Match"}
    return documented(401, 403, 404, 422, 429, 503, also={200: picture, 304: unchanged})


@router.get(
    "/{job_id}/figures/{name}.svg",
    response_class=Response,
    responses=_drawn("image/svg+xml"),
    operation_id="get_figure_svg",
    summary="Draw a figure as SVG",
)
async def get_svg(
    request: Request, context: Ctx, caller: CallerDep, job_id: Identifier, name: Annotated[FigureName, NAME]
) -> Response:
    """Drawn once and kept. Text is drawn as outlines; `title` and `desc` say what the figure shows.

    404 `result_not_ready` until the job has ended, `no_result` if it ended without one.
    """
    return await figure_response(request, context, caller, job_id, name, "svg")


@router.get(
    "/{job_id}/figures/{name}.png",
    response_class=Response,
    responses=_drawn("image/png"),
    operation_id="get_figure_png",
    summary="Draw a figure as PNG",
)
async def get_png(
    request: Request, context: Ctx, caller: CallerDep, job_id: Identifier, name: Annotated[FigureName, NAME]
) -> Response:
    """Drawn once and kept; 840 pixels wide.

    404 `result_not_ready` until the job has ended, `no_result` if it ended without one.
    """
    return await figure_response(request, context, caller, job_id, name, "png")


async def figure_response(
    request: Request, context: Context, caller: Caller, job_id: str, name: FigureName, kind: FigureFormat
) -> Response:
    """The figure, or 304. Raises NotFound."""
    found = await run_in_threadpool(context.drawing.kept, caller, job_id, name, kind)
    if found is None:
        found = await context.drawing.figure(caller, job_id, name, kind)
    answer = conditional(request, found.digest, Response(found.data, media_type=MEDIA_TYPES[kind]))
    answer.headers["Cache-Control"] = FOR_A_DAY
    answer.headers["Content-Security-Policy"] = DRAWN_ONLY
    return answer
