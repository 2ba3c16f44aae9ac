"""The HTTP server, which stops gracefully: nobody is kept waiting for a job, and what is being answered is answered."""

import socket

import uvicorn
from fastapi import FastAPI


class Server(uvicorn.Server):
    """uvicorn, with one step before its own shutdown."""

    def __init__(self, config: uvicorn.Config, app: FastAPI) -> None:
        super().__init__(config)
        self._app = app

    async def shutdown(self, sockets: list[socket.socket] | None = None) -> None:
        """Callers with `Prefer: wait` get their 202 now and event streams end; then uvicorn's own steps."""
        self._app.state.context.waiting.release()
        await super().shutdown(sockets)
