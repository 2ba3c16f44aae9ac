"""Signing in with a key, and out."""

from dataclasses import dataclass
from typing import Annotated

from fastapi import APIRouter, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import RedirectResponse, Response

from service.errors import Forbidden, Unauthenticated
from service.web.context import Ctx
from service.web.pages.page_route import PageRoute
from service.web.pages.render import render
from service.web.pages.visitors import (
    FORM,
    SESSION,
    VisitorDep,
    new_secret,
    read_form,
    token_of,
    with_form_cookie,
    with_session_cookie,
)
from service.workflows.sessions import sign_in, sign_out

router = APIRouter(route_class=PageRoute, include_in_schema=False)
LONGEST_KEY = 200


@dataclass(frozen=True, kw_only=True, slots=True)
class SignInPage:
    """sign_in.html. `back`: where to go afterwards; `problem`: why the last try did not work."""

    back: str
    problem: str | None


@router.get("/sign-in")
def form(request: Request, next: Annotated[str, Query(max_length=2000)] = "/history") -> Response:
    """Ask for a key."""
    return _shown(request, back=local(next), problem=None, status=200)


@router.post("/sign-in")
async def post(request: Request, context: Ctx) -> Response:
    """A session for who holds the key."""
    try:
        sent = await read_form(request, request.cookies.get(FORM, ""))
    except Forbidden as error:
        return _shown(request, back="/history", problem=error.message, status=403)
    back, key = local(str(sent.get("next") or "")), str(sent.get("key") or "").strip()
    try:
        if not 0 < len(key) <= LONGEST_KEY:
            raise Unauthenticated("this key is not known, or was revoked")
        token = await run_in_threadpool(sign_in, context.database, key, now=context.now())
    except Unauthenticated as error:
        return _shown(request, back=back, problem=error.message, status=401)
    return with_session_cookie(request, token, RedirectResponse(back, status_code=303))


@router.post("/sign-out")
async def out(request: Request, context: Ctx, visitor: VisitorDep) -> Response:
    """End the session."""
    await read_form(request, visitor.secret)
    token = request.cookies.get(SESSION)
    if token is not None:
        await run_in_threadpool(sign_out, context.database, token)
    answer = RedirectResponse("/sign-in", status_code=303)
    answer.delete_cookie(SESSION)
    return answer


def local(address: str) -> str:
    """The address if it is a path of this service, else the history: nobody is sent elsewhere."""
    plain = address.startswith("/") and not address.startswith(("//", "/\\")) and address.isprintable()
    return address if plain else "/history"


def _shown(request: Request, *, back: str, problem: str | None, status: int) -> Response:
    secret = request.cookies.get(FORM) or new_secret()
    page = SignInPage(back=back, problem=problem)
    response = render("sign_in.html", page, caller=None, form_token=token_of(secret), status=status)
    return with_form_cookie(request, secret, response)
