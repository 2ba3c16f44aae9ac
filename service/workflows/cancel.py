"""Call a job off: at once, whoever holds it. A worker that still computes it finds its token void and stops."""

from datetime import datetime

from service.errors import Conflict, NotFound
from service.store import events, jobs, leases
from service.store.database import Database
from service.store.records import JobRecord
from service.store.tables import State


def cancel_job(database: Database, job_id: str, *, by: str, now: datetime) -> JobRecord:
    """The cancelled job. Cancelling twice is no error. Raises NotFound, and Conflict if it has ended otherwise."""
    with database.write() as connection:
        was = leases.cancel(connection, job_id, now=now)
        if was is not None:
            events.add(connection, job_id, "cancelled", now, by=by, was=was)
        job = jobs.find(connection, job_id)
    if job is None:
        raise NotFound(f"there is no job {job_id}")
    if job.state != State.CANCELLED:
        raise Conflict(f"job {job_id} has {job.state} and cannot be cancelled", code="job_has_ended")
    return job
