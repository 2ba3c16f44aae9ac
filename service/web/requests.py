"""Gives every request an id, and logs what was answered."""

import logging
import re
import time
from collections.abc import MutableMapping
from typing import Any

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.store.clock import new_id

USABLE = re.compile(rb"[A-Za-z0-9._-]{1,64}")
log = logging.getLogger("leastbend.requests")


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
        began = time.perf_counter()

        async def send_with_id(message: Message) -> None:
            if message["type"] == "http.response.start":
                message["headers"] = [*message.get("headers", ()), (b"x-request-id", request_id)]
                _log(scope, message["status"], time.perf_counter() - began)
            await send(message)

        await self.app(scope, receive, send_with_id)


def _log(scope: Scope, status: int, seconds: float) -> None:
    """One line an answer. `job_id` where the path has one; never the query or the key."""
    extra = {
        "request_id": scope["state"]["request_id"],
        "method": scope["method"],
        "path": scope["path"],
        "status": status,
        "seconds": round(seconds, 6),
        "caller": scope["state"].get("caller"),
        "job_id": scope.get("path_params", {}).get("job_id") or scope["state"].get("job_id"),
    }
    log.info("answered", extra={name: value for name, value in extra.items() if value is not None})
