"""One worker process's desk: one job at a time, from claim to outcome, whatever goes wrong in between."""

import faulthandler
import logging
import sys
from collections.abc import Callable
from datetime import datetime, timedelta

from sqlalchemy.exc import SQLAlchemyError

from service.errors import LeastbendError, Overloaded
from service.settings import Settings
from service.store import leases
from service.store.clock import utc_now
from service.store.database import Database
from service.store.records import Claim
from service.store.turns import STALEST_EVERY
from service.worker.heartbeat import Heartbeat
from service.workflows.provenance import Machine
from service.workflows.run import hand_back, retry_job, run_job, take_job

PATIENCE_SECONDS = 30.0  # a result is worth waiting so long for a database that restarts

logger = logging.getLogger(__name__)


class Desk:
    """Takes and runs jobs in this process. `busy` while one is in hand."""

    def __init__(
        self,
        settings: Settings,
        database: Database,
        heartbeat: Heartbeat,
        machine: Machine,
        *,
        worker: str,
        clock: Callable[[], datetime] = utc_now,
    ) -> None:
        self._settings = settings
        self._database = database
        self._heartbeat = heartbeat
        self._machine = machine
        self._worker = worker
        self._clock = clock
        self._looks = 0
        self.busy = False

    def work_once(self) -> bool:
        """Take the job whose turn it is and bring it to an end. False if none waits, or none can be taken now."""
        self._looks += 1
        stalest = self._looks % STALEST_EVERY == 0
        self.busy = True
        try:
            claim = take_job(self._database, self._settings, worker=self._worker, now=self._clock(), stalest=stalest)
            if claim is None:
                return False
            with self._heartbeat.holding(claim):
                self._run(claim)
        except (LeastbendError, SQLAlchemyError) as error:
            # Neither taken nor, if it was taken, given back: its lease runs out, and the sweep sees to it.
            logger.warning("the database does not answer: %s", error)
            return False
        finally:
            self.busy = False
        return True

    def _run(self, claim: Claim) -> None:
        # Not a signal: this also stops a process that is inside C code. The sweep then marks the job timed out.
        faulthandler.dump_traceback_later(self._settings.job_seconds, exit=True, file=sys.__stderr__ or 2)
        try:
            run_job(
                self._database,
                claim,
                self._machine,
                clock=self._clock,
                progress=self._heartbeat.say,
                patience=PATIENCE_SECONDS,
            )
        except leases.Stale:
            logger.warning("job %s was cancelled or given to another worker; its outcome is dropped", claim.job_id)
        except KeyboardInterrupt:
            self._end(claim, lambda: self._hand_back(claim, "its worker was stopped", timedelta()))
            raise
        except Overloaded as error:
            why, wait = error.message, timedelta(seconds=error.retry_after)
            self._end(claim, lambda: self._hand_back(claim, why, wait))
        except Exception as error:
            logger.exception("job %s failed in attempt %s", claim.job_id, claim.attempt)
            reason = f"{type(error).__name__}: {error}"
            self._end(
                claim,
                lambda: retry_job(self._database, self._settings, claim, reason=reason, now=self._clock()),
            )
        finally:
            faulthandler.cancel_dump_traceback_later()

    def _hand_back(self, claim: Claim, reason: str, wait: timedelta) -> None:
        hand_back(self._database, claim, reason=reason, now=self._clock(), wait=wait)

    def _end(self, claim: Claim, step: Callable[[], None]) -> None:
        try:
            step()
        except leases.Stale:
            logger.warning("job %s had been cancelled or given to another worker", claim.job_id)
