"""What every request works with, made once by `create_app` and never global."""

from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime
from typing import Annotated, cast

from fastapi import Depends, Request

from service.settings import Settings
from service.store.database import Database
from service.store.transport import Transport
from service.web.figures.desk import DrawingDesk
from service.web.metrics import Metrics
from service.web.paging import page_size
from service.web.rates import Rates
from service.web.waiting import Waiting


@dataclass(frozen=True, kw_only=True)
class Context:
    """One installation as the routes see it."""

    settings: Settings
    database: Database
    transport: Transport
    waiting: Waiting
    rates: Rates
    metrics: Metrics
    drawing: DrawingDesk
    now: Callable[[], datetime]

    def page_size(self, limit: int | None) -> int:
        """The size of a page that was asked for. Raises InvalidInput beyond the installation's limit."""
        return page_size(limit, self.settings.page_limit)


def _context(request: Request) -> Context:
    return cast(Context, request.app.state.context)


Ctx = Annotated[Context, Depends(_context)]
