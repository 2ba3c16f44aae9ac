"""Jobs for the tests of store and worker: small calibrations, put in as the API puts them in."""

from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
from sqlalchemy import func, select

from service.core.plan import Plan
from service.settings import Settings
from service.store import events, jobs
from service.store import verdicts as verdict_store
from service.store.database import Database
from service.store.records import Claim, DatasetContent, JobRecord, VerdictRecord
from service.store.tables import jobs as jobs_table
from service.store.tables import plans, results, verdicts
from service.store.transport import Transport
from service.workflows.callers import Caller
from service.workflows.provenance import Machine
from service.workflows.run import take_job
from service.workflows.submit import Submission, submit_job

START = datetime(2030, 1, 1, tzinfo=UTC)
MACHINE = Machine(versions={"leastbend": "0"}, blas=[], platform="test")


def at(seconds: float) -> datetime:
    """A moment of the injected clock."""
    return START + timedelta(seconds=seconds)


def calibration(seed: int = 0, *, points: int = 12, subject: str | None = None) -> DatasetContent:
    """A slightly bent calibration with normal errors; other seeds, other data."""
    random = np.random.default_rng(seed)
    x = np.linspace(0.0, 10.0, points)
    y = 1.0 + 2.0 * x + 0.03 * x**2 + random.normal(0.0, 0.05, points)
    return DatasetContent(subject=subject or f"gauge-{seed}", x=x, y=y)


@dataclass(frozen=True)
class Desk:
    """Puts jobs in, takes them and looks at them, at given times."""

    database: Database
    transport: Transport
    settings: Settings
    start: datetime = START

    def put(self, seed: int = 0, *, by: str = "anna", priority: int = 0, seconds: float = 0, **more: Any) -> str:
        """Id of a new job."""
        plan = more.pop("plan", Plan())
        asked = Submission(plan=plan, dataset=calibration(seed, **more), priority=priority)
        return self.submit(asked, by=by, seconds=seconds)

    def submit(self, asked: Submission, *, by: str = "anna", seconds: float = 0) -> str:
        """Id of a new job."""
        caller = Caller(name=by, role="submit")
        now = self.start + timedelta(seconds=seconds)
        put, _ = submit_job(self.database, self.transport, self.settings, caller, asked, repeat_key=None, now=now)
        return put.job.id

    def take(self, worker: str = "w1", *, seconds: float = 0, stalest: bool = False) -> Claim | None:
        """Claim the next job."""
        return take_job(
            self.database, self.settings, worker=worker, now=self.start + timedelta(seconds=seconds), stalest=stalest
        )

    def took(self, worker: str = "w1", *, seconds: float = 0) -> Claim:
        """Claim the next job, of which there must be one."""
        claim = self.take(worker, seconds=seconds)
        assert claim is not None
        return claim

    def job(self, job_id: str) -> JobRecord:
        """Its row."""
        with self.database.read() as connection:
            found = jobs.find(connection, job_id)
        assert found is not None
        return found

    def documents(self, job_id: str) -> tuple[str, str, str]:
        """Plan, result and provenance, as stored."""
        query = (
            select(plans.c.document, results.c.document.label("result"), results.c.provenance)
            .join(jobs_table, jobs_table.c.plan_digest == plans.c.digest)
            .join(results, results.c.job_id == jobs_table.c.id)
            .where(jobs_table.c.id == job_id)
        )
        with self.database.read() as connection:
            return tuple(connection.execute(query).one())

    def verdict(self, job_id: str) -> VerdictRecord:
        """The verdict it ended with."""
        with self.database.read() as connection:
            found = verdict_store.of_job(connection, job_id)
        assert found is not None
        return found

    def history(self, job_id: str) -> list[str]:
        """Kinds of its events, in order."""
        with self.database.read() as connection:
            return [kind for kind, _, _ in events.of_job(connection, job_id)]

    def recorded(self) -> tuple[int, int]:
        """How many results and verdicts there are."""
        with self.database.read() as connection:
            return (
                connection.execute(select(func.count()).select_from(results)).scalar_one(),
                connection.execute(select(func.count()).select_from(verdicts)).scalar_one(),
            )
