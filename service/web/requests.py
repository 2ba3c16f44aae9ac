"""Gives every request an id, and every response the header that says it."""

import re
from collections.abc import MutableMapping
from typing import Any

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.store.clock import new_id

USABLE = re.compile(rb"[A-Za-z0-9._-]{1,64}")


class RequestIds:
    """Takes the caller's X-Request-Id where it is a plain word, else makes one."""

    def __init__(self, app: ASGIApp) -> None:
        self.app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        given = dict(scope["headers"]).get(b"x-request-id", b"")
        request_id = given if USABLE.fullmatch(given) else new_id().encode()
        state: MutableMapping[str, Any] = scope.setdefault("state", {})
        state["request_id"] = request_id.decode()

        async def send_with_id(message: Message) -> None:
            if message["type"] == "http.response.start":
                message["headers"] = [*message.get("headers", ()), (b"x-request-id", request_id)]
            await send(message)

        await self.app(scope, receive, send_with_id)
