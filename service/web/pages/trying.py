"""A page to try a dataset by paste or file: the same path as POST /v1/jobs."""

from dataclasses import dataclass, field

from fastapi import APIRouter, Request
from pydantic import ConfigDict, Field
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from service.core.plan import Plan, Weights
from service.errors import InvalidInput, TooLarge
from service.store.records import DatasetContent
from service.web.context import Context, Ctx
from service.web.pages.labels import Labeller, field_label, named_by, sentences
from service.web.pages.page_route import PageRoute
from service.web.pages.pasted import is_json, json_label, read_json, read_table, table_of
from service.web.pages.show import show
from service.web.pages.visitors import VisitorDep, read_form
from service.web.schemas.common import Body, Finite, Label, Line
from service.web.schemas.plans import MaxPermissibleErrorBody, PlanBody, RequirementsBody
from service.web.strict_json import read_value
from service.workflows.callers import Caller
from service.workflows.plans import list_plans
from service.workflows.submit import Submission, submit_job

router = APIRouter(route_class=PageRoute, include_in_schema=False)
MOST_PLANS = 100
SAID = ("x_quantity", "x_unit", "y_quantity", "y_unit")
FIELDS = ("subject", *SAID, "table", "plan_id", "max_degree", "weights", "mpe_value", "mpe_of", "mpe_kind")
EXAMPLE = """x,y,series
0,4.001,up
100,7.204,up
200,10.399,up
300,13.602,up
400,16.798,up
500,20.003,up
500,20.001,down
400,16.801,down
300,13.599,down
200,10.402,down
100,7.198,down
0,3.999,down"""


class TryBody(Body):
    """The form, apart from the table."""

    model_config = ConfigDict(extra="forbid", strict=False, frozen=True)

    subject: Label | None = None
    x_quantity: Line | None = None
    x_unit: Line | None = None
    y_quantity: Line | None = None
    y_unit: Line | None = None
    plan_id: Label | None = None
    max_degree: int = Field(6, ge=0, le=12)
    weights: Weights = "auto"
    mpe_value: Finite | None = Field(None, gt=0)
    mpe_of: str = Field("x", pattern="^[xy]$")
    mpe_kind: str = Field("percent_of_span", pattern="^(absolute|percent_of_value|percent_of_span)$")


@dataclass(frozen=True, kw_only=True, slots=True)
class TryPage:
    """try.html. `given`: what the form shows, by field; `errors`: what was wrong with it, in words; `plans`: named."""

    given: dict[str, str]
    errors: tuple[str, ...] = ()
    plans: list[tuple[str, str]] = field(default_factory=list)
    example: str = EXAMPLE


@router.get("/try")
async def form(request: Request, context: Ctx, visitor: VisitorDep) -> Response:
    """An empty form."""
    page = TryPage(given=_shown({}), plans=await run_in_threadpool(_plans, context))
    return show(request, visitor, "try.html", page)


@router.post("/try")
async def post(request: Request, context: Ctx, visitor: VisitorDep) -> Response:
    """Queue one job, and go to it; or the form again with what to mend."""
    sent = await read_form(request, visitor.secret)
    given = {name: str(sent.get(name) or "").strip() for name in FIELDS}
    given["table"] = str(sent.get("table") or "")  # as it was pasted: mistakes are named by its lines
    try:
        file = sent.get("file")
        body = file if isinstance(file, bytes) else given["table"].encode()
        job_id = await run_in_threadpool(_submit, context, visitor.caller, given, body)
    except (InvalidInput, TooLarge) as error:
        errors = sentences(error) if isinstance(error, InvalidInput) else (error.message,)
        page = TryPage(given=_shown(given), errors=errors, plans=await run_in_threadpool(_plans, context))
        return show(request, visitor, "try.html", page, status=422)
    return RedirectResponse(f"/job/{job_id}", status_code=303)


def _submit(context: Context, caller: Caller, given: dict[str, str], body: bytes) -> str:
    """Id of the new job. Raises InvalidInput that names every field in words, TooLarge."""
    with named_by(field_label):
        said = read_value(TryBody, {name: value for name, value in given.items() if value and name != "table"})
        if not body.strip():
            raise InvalidInput.at("/table", "is empty: paste a table with the columns x and y, or choose a file")
    content, place = _content(said, body)
    with named_by(lambda pointer: place(pointer) if pointer.startswith("/dataset/") else field_label(pointer)):
        submission = Submission(dataset=content, plan=None if said.plan_id else _plan(said), plan_id=said.plan_id)
        detail, _ = submit_job(
            context.database,
            context.transport,
            context.settings,
            caller,
            submission,
            repeat_key=None,
            now=context.now(),
        )
    return detail.job.id


def _content(said: TryBody, body: bytes) -> tuple[DatasetContent, Labeller]:
    """The dataset, and how its places are named to who pasted it."""
    typed = {name: getattr(said, name) for name in ("subject", *SAID) if getattr(said, name) is not None}
    if is_json(body):
        return read_json(body, typed), json_label
    with named_by(field_label):
        if said.subject is None:
            raise InvalidInput.at("/subject", "is missing: name the instrument or method that this calibrates")
    table, subject = table_of(body), typed.pop("subject")
    return read_table(table, subject=subject, details=typed), table.label


def _plan(said: TryBody) -> Plan:
    permitted = None
    if said.mpe_value is not None:
        asked = {"value": said.mpe_value, "of": said.mpe_of, "kind": said.mpe_kind}
        permitted = read_value(MaxPermissibleErrorBody, asked)
    requirements = RequirementsBody(max_permissible_error=permitted)
    least = min(1, said.max_degree)
    body = PlanBody(min_degree=least, max_degree=said.max_degree, weights=said.weights, requirements=requirements)
    return body.plan("")


def _plans(context: Context) -> list[tuple[str, str]]:
    found = list_plans(context.database, name=None, latest_only=True, before=None, limit=MOST_PLANS)
    return [(one.id, f"{one.name}, version {one.version}") for one in found.items]


def _shown(given: dict[str, str]) -> dict[str, str]:
    defaults = {"max_degree": "6", "weights": "auto", "mpe_of": "x", "mpe_kind": "percent_of_span"}
    return {name: given.get(name) or defaults.get(name, "") for name in FIELDS}
