"""The HTTP server: bounded heads, and a graceful stop in which nobody is kept waiting for a job."""

import socket
from typing import Any

import uvicorn
from fastapi import FastAPI
from uvicorn.protocols.http.httptools_impl import HttpToolsProtocol

HEAD_BYTES = 64 * 1024  # of a request's line and headers


class BoundedHead(HttpToolsProtocol):
    """httptools keeps a head of any size while it comes in; here it is refused (400) once it is too long."""

    def __init__(self, *args: Any, **options: Any) -> None:
        super().__init__(*args, **options)
        self._in_head, self._head, self._requests = True, 0, 0

    def data_received(self, data: bytes) -> None:
        """asyncio's way to hand over what came in."""
        before = (self._in_head, self._requests)
        super().data_received(data)
        # Nothing but a part of one head: a part that begins or ends elsewhere is no longer than what is read at once.
        if self._in_head and before == (True, self._requests) and not self.transport.is_closing():
            self._head += len(data)
            if self._head > HEAD_BYTES:
                self.send_400_response("The head of the request is too long.")

    def on_headers_complete(self) -> None:
        """httptools's way to say so."""
        self._in_head = False
        super().on_headers_complete()

    def on_message_complete(self) -> None:
        """The same."""
        self._in_head, self._head, self._requests = True, 0, self._requests + 1
        super().on_message_complete()


class Server(uvicorn.Server):
    """uvicorn, with one step before its own shutdown."""

    def __init__(self, config: uvicorn.Config, app: FastAPI) -> None:
        super().__init__(config)
        self._app = app

    async def shutdown(self, sockets: list[socket.socket] | None = None) -> None:
        """Callers with `Prefer: wait` get their 202 now and event streams end; then uvicorn's own steps."""
        self._app.state.context.waiting.release()
        await super().shutdown(sockets)
