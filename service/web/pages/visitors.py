"""Who looks at a page, and whether a form really came from one of ours.

A session is a random cookie, HttpOnly and SameSite=Strict, of which the database holds the hash. Forms carry a token
that only who holds the cookie's value can compute; without keys the same is done with a cookie that means nothing else.
"""

import hashlib
import hmac
import secrets
from dataclasses import dataclass
from typing import Annotated
from urllib.parse import urlsplit

from fastapi import Depends, Request
from starlette.responses import Response

from service.errors import Forbidden, RateLimited
from service.web.callers import demand_loopback
from service.web.context import Ctx
from service.web.strict_json import demand_type, read_body
from service.workflows.callers import Caller
from service.workflows.sessions import LASTS, visitor

SESSION, FORM = "leastbend_session", "leastbend_form"
FORMS = ("application/x-www-form-urlencoded", "multipart/form-data")
MOST_FIELDS = 40


@dataclass(frozen=True, kw_only=True, slots=True)
class Visitor:
    """Who looks. `secret`: value of the cookie that form tokens are made from."""

    caller: Caller
    secret: str

    @property
    def form_token(self) -> str:
        """What a form must send back."""
        return token_of(self.secret)


def token_of(secret: str) -> str:
    """The form token that belongs to a cookie."""
    return hashlib.sha256(f"form:{secret}".encode()).hexdigest() if secret else ""


def _visitor(request: Request, context: Ctx) -> Visitor:
    """Raises Unauthenticated, Forbidden, RateLimited."""
    token = request.cookies.get(SESSION)
    caller = visitor(context.database, token, now=context.now())
    if caller.open:
        demand_loopback(request)
    secret = request.cookies.get(FORM, "") if caller.open or token is None else token
    known = Visitor(caller=caller, secret=secret)
    request.state.visitor = known  # the page of an error is for somebody, too
    wait = context.rates.take(caller.name)
    if wait:
        raise RateLimited(f"more than {context.rates.per_minute} requests a minute", retry_after=wait)
    return known


def visitor_of(request: Request) -> Visitor | None:
    """Who looks, if that was found out before an error came."""
    return getattr(request.state, "visitor", None)


VisitorDep = Annotated[Visitor, Depends(_visitor)]


def with_form_cookie(request: Request, secret: str, response: Response) -> Response:
    """Set the cookie that forms without a session need."""
    response.set_cookie(FORM, secret, httponly=True, samesite="strict", secure=request.url.scheme == "https")
    return response


def new_secret() -> str:
    """A value for a cookie."""
    return secrets.token_urlsafe(32)


def with_session_cookie(request: Request, token: str, response: Response) -> Response:
    """Set the cookie of a session."""
    response.set_cookie(
        SESSION,
        token,
        max_age=int(LASTS.total_seconds()),
        httponly=True,
        samesite="strict",
        secure=request.url.scheme == "https",
    )
    return response


Sent = dict[str, str | bytes]
"""Fields of a form by name; the bytes of a file, where one was chosen."""


async def read_form(request: Request, secret: str) -> Sent:
    """A form that one of our pages sent: of bounded size, from the same origin, with its token.

    Raises Forbidden, TooLarge, InvalidInput.
    """
    demand_type(request, *FORMS)
    origin = request.headers.get("origin")
    if origin is not None and urlsplit(origin).netloc != request.headers.get("host"):
        raise Forbidden("the form was sent from another site", code="foreign_origin")
    sent = await _fields(request, await read_body(request))
    given, expected = sent.get("form_token"), token_of(secret)
    if not (expected and isinstance(given, str) and hmac.compare_digest(given.encode(), expected.encode())):
        raise Forbidden("the form is out of date; load the page again and send it once more", code="stale_form")
    return sent


async def _fields(request: Request, body: bytes) -> Sent:
    async def once() -> dict[str, object]:
        return {"type": "http.request", "body": body, "more_body": False}

    sent: Sent = {}
    reading = Request(request.scope, once)
    async with reading.form(max_files=1, max_fields=MOST_FIELDS, max_part_size=len(body) + 1) as form:
        for name, value in form.items():
            if isinstance(value, str):
                sent[name] = value
            elif value.filename:
                sent[name] = await value.read()
    return sent
