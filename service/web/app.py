"""The application, built from its settings; importing this configures nothing."""

from collections.abc import AsyncIterator, Callable
from contextlib import asynccontextmanager
from datetime import datetime
from importlib.metadata import version

from fastapi import FastAPI

from service.settings import Settings
from service.store.clock import utc_now
from service.store.database import open_database
from service.store.migrate import migrate
from service.store.transport import open_transport
from service.web import problems
from service.web.context import Context
from service.web.openapi import describe
from service.web.requests import RequestIds
from service.web.routes import datasets, health, jobs
from service.web.schemas.datasets import DatasetBody
from service.web.schemas.jobs import JobBody
from service.web.waiting import Waiting


def create_app(settings: Settings, *, now: Callable[[], datetime] = utc_now) -> FastAPI:
    """The service on this installation. Migrates the database when it starts; starts no workers."""

    @asynccontextmanager
    async def lifespan(app: FastAPI) -> AsyncIterator[None]:
        database = open_database(settings, durable=True)
        migrate(database)
        transport = open_transport(settings)
        waiting = Waiting(database, tick=settings.wait_tick_seconds)
        app.state.context = Context(settings=settings, database=database, transport=transport, waiting=waiting, now=now)
        yield
        await waiting.close()
        transport.close()
        database.close()

    app = FastAPI(title="Leastbend", version=version("leastbend"), lifespan=lifespan, docs_url=None, redoc_url=None)
    problems.install(app)
    app.add_middleware(RequestIds)
    for routes in (datasets, jobs, health):
        app.include_router(routes.router)
    describe(app, DatasetBody, JobBody)
    return app
