"""One thread in each worker process that renews the lease of the job in hand and notices when it is void."""

import logging
import os
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime, timedelta

from sqlalchemy.exc import SQLAlchemyError

from service.errors import LeastbendError
from service.settings import Settings
from service.store import leases
from service.store.clock import utc_now
from service.store.database import Database
from service.store.records import Claim

LOOK_SECONDS = 0.4
VOID_LOOKS = 2  # a job that just ended looks void once; twice in a row it was cancelled or given to another worker
EXIT_VOID = 70

logger = logging.getLogger(__name__)


def leave_process() -> None:
    """End this process at once, even inside C code; the consumer starts another."""
    os._exit(EXIT_VOID)


class Heartbeat(threading.Thread):
    """Looks every 0.4 s, so that a cancelled job stops within a second; renews every quarter of a lease."""

    def __init__(
        self,
        settings: Settings,
        database: Database,
        *,
        clock: Callable[[], datetime] = utc_now,
        leave: Callable[[], None] = leave_process,
    ) -> None:
        super().__init__(name="heartbeat", daemon=True)
        self._settings = settings
        self._database = database
        self._clock = clock
        self._leave = leave
        self._claim: Claim | None = None
        self._renewed = 0.0
        self._void = 0
        self._progress: tuple[str, int, int] | None = None
        self._told: tuple[str, int, int] | None = None

    @contextmanager
    def holding(self, claim: Claim) -> Iterator[None]:
        """While the block runs, the claim is kept alive."""
        self._progress = self._told = None
        self._void = 0
        self._renewed = time.monotonic()
        self._claim = claim
        try:
            yield
        finally:
            self._claim = None

    def say(self, stage: str, done: int, of: int) -> None:
        """Progress of the job in hand; written at the next look."""
        self._progress = (stage, done, of)

    def run(self) -> None:
        """Look for ever; the thread ends with its process."""
        while True:
            time.sleep(LOOK_SECONDS)
            self.look(time.monotonic())

    def look(self, moment: float) -> None:
        """One look at monotonic time `moment`."""
        claim, progress = self._claim, self._progress
        if claim is None:
            return
        try:
            if progress != self._told or moment - self._renewed >= self._settings.heartbeat_seconds:
                self._renew(claim, progress)
                self._renewed, self._told = moment, progress
            else:
                self._check(claim)
            self._void = 0
        except leases.Stale:
            self._void = self._void + 1 if claim is self._claim else 0
            if self._void >= VOID_LOOKS:
                logger.warning("job %s was cancelled or given to another worker; this process ends", claim.job_id)
                self._leave()
        except (LeastbendError, SQLAlchemyError) as error:
            logger.warning("could not renew the lease of job %s: %s", claim.job_id, error)

    def _renew(self, claim: Claim, progress: tuple[str, int, int] | None) -> None:
        lease_until = self._clock() + timedelta(seconds=self._settings.lease_seconds)
        with self._database.write() as connection:
            leases.renew(connection, claim.job_id, claim.token, lease_until=lease_until, progress=progress)

    def _check(self, claim: Claim) -> None:
        with self._database.read() as connection:
            if not leases.is_held(connection, claim.job_id, claim.token):
                raise leases.Stale(claim.job_id)
