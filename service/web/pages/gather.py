"""Everything that the page and the report of one job show, gathered from what the API answers."""

import json
from dataclasses import dataclass
from typing import Any

from service.store.clock import rfc3339
from service.store.records import JobRecord
from service.store.tables import FINAL, State
from service.web.context import Context
from service.web.figures.names import TITLES, FigureName
from service.web.pages import words
from service.web.pages.plan_lines import PlanLine, plan_lines
from service.web.pages.readings import Readings, readings_of
from service.web.schemas.datasets import dataset_view
from service.web.schemas.jobs import job_document
from service.workflows.callers import Caller
from service.workflows.read import read_dataset, read_events, read_job, read_verdict


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
    GET /v1/datasets/{id} answers it without points. `events`: kind, time and detail, oldest first. `elapsed`:
    seconds since a running job started; `longest`: after which it is stopped. `plan`: line by line; `readings`: for
    the report of a job with its result.
    """

    job: dict[str, Any]
    dataset: dict[str, Any]
    verdict: dict[str, Any] | None
    verdict_digest: str | None
    events: list[dict[str, Any]]
    figures: list[FigureItem]
    ended: bool
    may_cancel: bool
    elapsed: float | None
    longest: float
    plan: list[PlanLine]
    readings: Readings | None


def gather(
    context: Context, caller: Caller, job_id: str, shown: tuple[FigureName, ...], *, readings: bool = True
) -> JobPage:
    """One job for `caller`, with the figures named; `readings` may be many to load. Raises NotFound."""
    detail, notification = read_job(context.database, caller, job_id)
    _, happened = read_events(context.database, caller, job_id)
    wanted = readings and detail.result is not None
    record, content = read_dataset(context.database, caller, detail.job.dataset_id, points=wanted)
    figures: list[FigureItem] = []
    verdict, digest = None, None
    if detail.result is not None:
        said = context.drawing.words(caller, job_id)
        figures = [
            FigureItem(name=name, title=TITLES[name], alt=said[name], reading=words.FIGURES[name]) for name in shown
        ]
    if detail.job.state is State.SUCCEEDED:  # also where retention has removed the result: the verdict stays
        found = read_verdict(context.database, caller, job_id)
        verdict, digest = json.loads(found.document), found.digest
    document = json.loads(job_document(detail, notification))
    dataset = dataset_view(record)
    units = {axis: dataset[axis] or "" for axis in ("x_unit", "y_unit")}
    ended = detail.job.state in FINAL
    return JobPage(
        job=document,
        dataset=dataset,
        verdict=verdict,
        verdict_digest=digest,
        events=[{"kind": one.kind, "at": rfc3339(one.at), "detail": one.detail} for one in happened],
        figures=figures,
        ended=ended,
        may_cancel=not ended and caller.role != "read",
        elapsed=_elapsed(context, detail.job),
        longest=context.settings.job_seconds,
        plan=plan_lines(document["plan"], **units),
        readings=None if content is None else readings_of(content, dataset, document),
    )


def _elapsed(context: Context, job: JobRecord) -> float | None:
    if job.state is not State.RUNNING or job.started_at is None:
        return None
    return max(0.0, (context.now() - job.started_at).total_seconds())
