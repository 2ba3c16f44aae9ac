"""Finds out who calls, before anything else is looked at.

With keys: `Authorization: Bearer KEY` (RFC 6750). Without keys the service listens on loopback only, and no web page
may drive it: the Host header must be a loopback name (DNS rebinding), and a foreign Origin is refused.
"""

import re
from collections.abc import Sequence
from ipaddress import ip_address
from typing import Annotated

from fastapi import Depends, Request, Security
from fastapi.security import HTTPBearer

from service.errors import Forbidden, RateLimited, Unauthenticated
from service.web.context import Ctx
from service.web.queries import demand_known_query
from service.workflows.callers import Caller, identify

BEARER = HTTPBearer(auto_error=False, description="A key made by `leastbend keys create`.")
LOOPBACK_NAMES = ("localhost", "ip6-localhost")
HOST = re.compile(r"(\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9.-]+)(?::\d{1,5})?")


def key_of(request: Request) -> str | None:
    """The key in the Authorization header; None if there is no such header. Raises Unauthenticated."""
    header = request.headers.get("authorization")
    if header is None:
        return None
    scheme, _, key = header.partition(" ")
    if scheme.lower() != "bearer" or not key.strip():
        raise Unauthenticated("the Authorization header must be: Bearer KEY")
    return key.strip()


def demand_loopback(request: Request, allowed_origins: Sequence[str] = ()) -> None:
    """Raises Forbidden if a web page of another origin may be behind this request, unless that origin is allowed."""
    given = request.headers.get("host", "")
    host = HOST.fullmatch(given)
    if host is None or not is_loopback(host[1].strip("[]")):
        raise Forbidden("without keys the Host header must be a loopback name", code="foreign_host")
    origin = request.headers.get("origin")
    if origin is not None and origin in allowed_origins:
        return
    own = (f"http://{given}".lower(), f"https://{given}".lower())
    if origin is not None and origin.lower() not in own:
        raise Forbidden("without keys no page of another origin may call", code="foreign_origin")
    if request.headers.get("sec-fetch-site") in ("cross-site", "same-site"):
        raise Forbidden("without keys no page of another site may call", code="foreign_origin")


def is_loopback(host: str) -> bool:
    """Whether the name or address is this machine's own."""
    if host.lower().rstrip(".") in LOOPBACK_NAMES:
        return True
    try:
        return ip_address(host).is_loopback
    except ValueError:
        return False


def the_caller(request: Request, context: Ctx) -> Caller:
    """The caller of this request. Raises Unauthenticated, Forbidden, RateLimited."""
    caller = identify(context.database, key_of(request))
    request.state.caller = caller.name
    if caller.open:
        demand_loopback(request, context.settings.allowed_origins)
    wait = context.rates.take(caller.name)
    if wait:
        raise RateLimited(f"more than {context.rates.per_minute} requests a minute", retry_after=wait)
    return caller


def _caller(request: Request, context: Ctx, _shown: Annotated[object, Security(BEARER)]) -> Caller:
    caller = the_caller(request, context)
    demand_known_query(request)
    return caller


CallerDep = Annotated[Caller, Depends(_caller)]
