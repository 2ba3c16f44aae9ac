"""The application, built from its settings; importing this configures nothing."""

from collections.abc import AsyncIterator, Callable
from contextlib import asynccontextmanager
from datetime import datetime
from importlib.metadata import version

from fastapi import FastAPI
from starlette.middleware.cors import CORSMiddleware

from service.settings import Settings
from service.store.clock import utc_now
from service.store.database import open_database
from service.store.migrate import migrate
from service.store.transport import open_transport
from service.web import problems
from service.web.context import Context
from service.web.figures.desk import DrawingDesk
from service.web.headers import SecurityHeaders
from service.web.methods import HeadIsGet
from service.web.metrics import Measured, Metrics
from service.web.openapi import describe
from service.web.pages import install as pages
from service.web.paths import PlainText
from service.web.rates import Rates
from service.web.requests import RequestIds
from service.web.routes import batches, datasets, events, figures, jobs, operations, plans, reference, report, verdicts
from service.web.schemas.batches import BatchBody, BatchItemView
from service.web.schemas.datasets import DatasetBody
from service.web.schemas.jobs import JobBody
from service.web.schemas.plans import NamedPlanBody
from service.web.waiting import Waiting

ROUTES = (datasets, jobs, verdicts, events, figures, report, batches, plans, operations, reference)


def create_app(settings: Settings, *, now: Callable[[], datetime] = utc_now) -> FastAPI:
    """The service on this installation. Migrates the database when it starts; starts no workers."""
    metrics = Metrics()

    @asynccontextmanager
    async def lifespan(app: FastAPI) -> AsyncIterator[None]:
        database = open_database(settings, durable=True)
        migrate(database)
        metrics.begin(database)
        transport = open_transport(settings)
        waiting = Waiting(database, tick=settings.wait_tick_seconds)
        drawing = DrawingDesk(database, now=now)
        app.state.context = Context(
            settings=settings,
            database=database,
            transport=transport,
            waiting=waiting,
            rates=Rates(settings.requests_per_minute),
            metrics=metrics,
            drawing=drawing,
            now=now,
        )
        yield
        await waiting.close()
        drawing.close()
        transport.close()
        database.close()

    app = FastAPI(
        title="Leastbend",
        version=version("leastbend"),
        lifespan=lifespan,
        openapi_url=None,  # service.web.routes.reference serves both
        docs_url=None,
        redoc_url=None,
        redirect_slashes=False,
    )
    problems.install(app)
    # The last added is the outermost.
    app.add_middleware(PlainText)
    app.add_middleware(HeadIsGet)
    app.add_middleware(Measured, metrics=metrics)
    if settings.allowed_origins:
        app.add_middleware(
            CORSMiddleware,
            allow_origins=settings.allowed_origins,
            allow_methods=["GET", "POST", "DELETE"],
            allow_headers=["Authorization", "Content-Type", "Idempotency-Key", "Prefer", "If-None-Match"],
            expose_headers=["ETag", "Location", "Retry-After", "Preference-Applied", "X-Request-Id"],
        )
    app.add_middleware(SecurityHeaders)
    app.add_middleware(RequestIds)
    for routes in ROUTES:
        app.include_router(routes.router)
    app.mount("/docs/files", reference.ASSETS)
    pages.install(app)
    describe(app, settings, DatasetBody, JobBody, BatchBody, NamedPlanBody, also=(BatchItemView,))
    return app
