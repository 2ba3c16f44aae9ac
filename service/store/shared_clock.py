"""One clock for all hosts: PostgreSQL's. Leases are compared across hosts, whose own clocks may be minutes apart."""

import time
from datetime import datetime, timedelta

from sqlalchemy import func, select

from service.store.clock import utc_now
from service.store.database import Database

AGAIN_SECONDS = 60.0


class SharedClock:
    """Call it for the time. It is this host's, put right by what the database said at the last setting."""

    def __init__(self, database: Database) -> None:
        self._database = database
        self._off = timedelta()
        self._set_at: float | None = None

    def __call__(self) -> datetime:
        """Now, in UTC."""
        return utc_now() + self._off

    def keep_right(self) -> None:
        """Ask the database, once a minute at most; SQLite is on this host and need not be asked. Raises Overloaded."""
        moment = time.monotonic()
        if not self._database.postgres or (self._set_at is not None and moment - self._set_at < AGAIN_SECONDS):
            return
        with self._database.read() as connection:
            before = utc_now()
            there: datetime = connection.execute(select(func.clock_timestamp())).scalar_one()
            here = before + (utc_now() - before) / 2
        self._off, self._set_at = there - here, moment
