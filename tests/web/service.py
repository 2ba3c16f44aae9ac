"""A running service for tests: the real application on a real socket, and a worker that works when it is told to."""

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from typing import cast

import httpx
import uvicorn
from fastapi import FastAPI

from service.settings import Settings
from service.store.database import Database, open_database
from service.web.app import create_app
from service.web.context import Context
from service.web.server import BoundedHead, Server
from service.worker.desk import Desk
from service.worker.heartbeat import Heartbeat
from service.workflows.provenance import this_machine


class Service:
    """What a test needs of a running service."""

    def __init__(self, settings: Settings, address: str, database: Database, app: FastAPI) -> None:
        self.settings = settings
        self.app = app
        self.address = address
        self.database = database
        self.http = httpx.Client(base_url=address, timeout=60)
        heartbeat = Heartbeat(settings, database)
        self.desk = Desk(settings, database, heartbeat, this_machine(), worker="desk of the test")

    @property
    def context(self) -> Context:
        """What its routes work with."""
        return cast(Context, self.app.state.context)

    def work(self) -> int:
        """Run every job that waits, here and now; answers how many."""
        done = 0
        while self.desk.work_once():
            done += 1
        return done

    @contextmanager
    def working(self) -> Iterator[None]:
        """Meanwhile a worker takes jobs as they come."""
        stop = threading.Event()

        def loop() -> None:
            while not stop.is_set():
                if not self.desk.work_once():
                    stop.wait(0.01)

        thread = threading.Thread(target=loop)
        thread.start()
        try:
            yield
        finally:
            stop.set()
            thread.join()


@contextmanager
def running(settings: Settings) -> Iterator[Service]:
    """The service listens on a free port until the block ends."""
    app = create_app(settings)
    config = uvicorn.Config(
        app,
        host="127.0.0.1",
        port=0,
        log_level="warning",
        access_log=False,
        backlog=2048,
        timeout_graceful_shutdown=5,
        http=BoundedHead,
    )
    server = Server(config, app)
    thread = threading.Thread(target=server.run)
    thread.start()
    try:
        while not server.started:
            if not thread.is_alive():
                raise RuntimeError("the service did not start")
            threading.Event().wait(0.01)
        port = server.servers[0].sockets[0].getsockname()[1]
        database = open_database(settings, durable=False)
        service = Service(settings, f"http://127.0.0.1:{port}", database, app)
        yield service
        service.http.close()
        database.close()
    finally:
        server.should_exit = True
        thread.join()
