"""A NUL in a path or a query names nothing: PostgreSQL's text cannot even be compared with one."""

from urllib.parse import parse_qsl

from fastapi import Request
from starlette.responses import Response
from starlette.types import ASGIApp, Receive, Scope, Send

from service.errors import FieldError
from service.web.problems import problem
from service.web.strict_json import pointer


class PlainText:
    """Refuses such a request, whichever route it would have met: API or page."""

    def __init__(self, app: ASGIApp) -> None:
        self.app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI."""
        refused = _refused(scope) if scope["type"] == "http" else None
        await (self.app if refused is None else refused)(scope, receive, send)


def _refused(scope: Scope) -> Response | None:
    if "\x00" in scope["path"]:
        return problem(Request(scope), 404, "not_found", "there is nothing at this path")
    if b"\x00" not in scope["query_string"] and b"%00" not in scope["query_string"]:
        return None
    pairs = parse_qsl(scope["query_string"].decode("latin-1"), keep_blank_values=True)
    bad = tuple(
        FieldError(pointer(("query", name.replace("\x00", ""))), "must not hold control characters")
        for name, value in pairs
        if "\x00" in name + value
    )
    return problem(Request(scope), 422, "invalid_input", str(bad[0]), errors=bad[:20]) if bad else None
