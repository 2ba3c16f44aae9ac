"""The history: every job, newest first, filtered and paged; and one subject's verdicts over time."""

from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Annotated, Any
from urllib.parse import urlencode

from fastapi import APIRouter, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from service.errors import InvalidInput
from service.store.records import JobFilter
from service.store.tables import FINAL, State
from service.web.context import Ctx
from service.web.pages.page_route import PageRoute
from service.web.pages.show import show
from service.web.pages.visitors import VisitorDep
from service.web.paging import cursor_of, position
from service.web.schemas.common import NO_CONTROLS
from service.web.schemas.jobs import job_summary
from service.workflows.read import list_jobs

router = APIRouter(route_class=PageRoute, include_in_schema=False)
PAGE = 50
VERDICTS = ("adequate", "conditional", "inadequate", "undecided")
Text = Annotated[str, Query(max_length=200)]


@dataclass(frozen=True, kw_only=True, slots=True)
class HistoryPage:
    """history.html. `jobs`: as the API lists them; `asked`: what the form shows, by field; `filtered`: whether
    anything is asked.

    `older`, `newest`: addresses of other pages with the same filter. `active`: whether any job here has not ended.
    `here`: the address of this page, which the live update asks again.
    """

    jobs: list[dict[str, Any]]
    asked: dict[str, str]
    filtered: bool
    older: str | None
    newest: str | None
    active: bool
    here: str
    states: tuple[str, ...]
    verdicts: tuple[str, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class SubjectPage:
    """subject.html. `jobs`: newest first, as the API lists them; `changes`: ids of jobs whose verdict or degree is not
    that of the one before; `counts`: verdicts on this page by word."""

    subject: str
    jobs: list[dict[str, Any]]
    changes: frozenset[str]
    counts: dict[str, int]
    older: str | None
    newest: str | None


@router.get("/", name="start")
def start() -> Response:
    """The history is where one starts."""
    return RedirectResponse("/history", status_code=307)


@router.get("/history")
async def history(
    request: Request,
    context: Ctx,
    visitor: VisitorDep,
    subject: Text = "",
    state: Text = "",
    verdict: Text = "",
    submitted_by: Text = "",
    since: Text = "",
    until: Text = "",
    cursor: Annotated[str | None, Query(max_length=100)] = None,
) -> Response:
    """One page of the history."""
    asked = {
        "subject": subject.strip(),
        "state": state,
        "verdict": verdict,
        "submitted_by": submitted_by.strip(),
        "since": since.strip(),
        "until": until.strip(),
    }
    wanted = JobFilter(
        subject=asked["subject"] or None,
        state=_word(state, tuple(State), "state"),
        verdict=_word(verdict, VERDICTS, "verdict"),
        submitted_by=asked["submitted_by"] or None,
        since=_moment(asked["since"], "since"),
        until=_moment(asked["until"], "until", end=True),
    )
    page = await run_in_threadpool(
        list_jobs, context.database, visitor.caller, wanted, before=position(cursor), limit=PAGE
    )
    given = {name: value for name, value in asked.items() if value}
    return show(
        request,
        visitor,
        "history.html",
        HistoryPage(
            jobs=[job_summary(job) for job in page.items],
            asked=asked,
            filtered=bool(given),
            older=_address("/history", given, cursor_of(page.after)),
            newest=None if cursor is None else _address("/history", given, ""),
            active=any(job.state not in FINAL for job in page.items),
            here=str(_address("/history", given, cursor or "")),
            states=tuple(State),
            verdicts=VERDICTS,
        ),
    )


@router.get("/subject")
async def subject(
    request: Request,
    context: Ctx,
    visitor: VisitorDep,
    name: Annotated[str, Query(min_length=1, max_length=200, pattern=NO_CONTROLS)],  # blank ones were once taken
    cursor: Annotated[str | None, Query(max_length=100)] = None,
) -> Response:
    """One instrument or method: its verdicts over time."""
    wanted = JobFilter(subject=name, state=State.SUCCEEDED)
    page = await run_in_threadpool(
        list_jobs, context.database, visitor.caller, wanted, before=position(cursor), limit=PAGE
    )
    jobs = [job_summary(job) for job in page.items]
    found = [one["verdict"] for one in jobs]
    return show(
        request,
        visitor,
        "subject.html",
        SubjectPage(
            subject=name,
            jobs=jobs,
            changes=_changes(jobs),
            counts={word: found.count(word) for word in VERDICTS if word in found},
            older=_address("/subject", {"name": name}, cursor_of(page.after)),
            newest=None if cursor is None else _address("/subject", {"name": name}, ""),
        ),
    )


def _changes(jobs: list[dict[str, Any]]) -> frozenset[str]:
    pairs = zip(jobs, jobs[1:], strict=False)
    return frozenset(
        new["id"]
        for new, old in pairs
        if (new["verdict"], new["chosen_degree"]) != (old["verdict"], old["chosen_degree"])
    )


def _address(path: str, given: dict[str, str], cursor: str | None) -> str | None:
    if cursor is None:
        return None
    query = given | ({"cursor": cursor} if cursor else {})
    return f"{path}?{urlencode(query)}" if query else path


def _word(value: str, known: tuple[str, ...], field: str) -> Any:
    if not value:
        return None
    if value not in known:
        raise InvalidInput.at(f"/query/{field}", f"must be one of {', '.join(known)}")
    return State(value) if field == "state" else value


def _moment(value: str, field: str, *, end: bool = False) -> datetime | None:
    """A day or a minute as browsers send them, in UTC; a day as `until` includes all of it."""
    if not value:
        return None
    try:
        found = datetime.fromisoformat(value)
    except ValueError as error:
        raise InvalidInput.at(f"/query/{field}", "must be a date such as 2026-05-04, or a date and time") from error
    if not 1900 <= found.year <= 9000:
        raise InvalidInput.at(f"/query/{field}", "must lie in the years 1900 to 9000")
    found = found.replace(tzinfo=UTC) if found.tzinfo is None else found.astimezone(UTC)
    return found + timedelta(days=1) if end and len(value) <= len("2026-05-04") else found
