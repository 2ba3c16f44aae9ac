"""HEAD wherever there is GET (RFC 9110 §9.1), and which methods a path takes."""

import anyio
from starlette.routing import BaseRoute, Match
from starlette.types import ASGIApp, Message, Receive, Scope, Send

METHODS = ("GET", "POST", "PUT", "PATCH", "DELETE")


def allowed(routes: list[BaseRoute], scope: Scope) -> str:
    """The Allow header of this path; OPTIONS is among them wherever anything is."""
    found = [name for name in METHODS if _takes(routes, scope, name)]
    if "GET" in found:
        found.insert(1, "HEAD")
    return ", ".join([*found, "OPTIONS"])


def _takes(routes: list[BaseRoute], scope: Scope, method: str) -> bool:
    asked = {**scope, "method": method}
    return any(route.matches(asked)[0] is Match.FULL for route in routes)


class HeadIsGet:
    """Answers HEAD with the head of what GET answers. Of a stream, only the head is made."""

    def __init__(self, app: ASGIApp) -> None:
        self.app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI."""
        if scope["type"] != "http" or scope["method"] != "HEAD":
            await self.app(scope, receive, send)
            return
        inner = {**scope, "method": "GET"}

        async def send_head(message: Message) -> None:
            if message["type"] == "http.response.start":
                scope.update({name: inner[name] for name in ("route", "path_params") if name in inner})
                await send(message)
            elif message["type"] == "http.response.body":
                await send({"type": "http.response.body", "body": b""})
                whole.cancel()

        with anyio.CancelScope() as whole:
            await self.app(inner, receive, send_head)
