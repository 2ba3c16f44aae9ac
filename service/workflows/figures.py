"""Figures of a job: taken from where they are kept, else drawn and kept. Whoever calls brings the drawing."""

import hashlib
from collections.abc import Callable
from datetime import datetime

from service.errors import NotFound
from service.store import datasets, figures, jobs
from service.store.database import Database
from service.store.figures import FigureRecord
from service.store.records import DatasetContent, JobDetail
from service.store.tables import State
from service.workflows.callers import Caller
from service.workflows.read import sees

Draw = Callable[[DatasetContent, JobDetail], bytes]


def kept_figure(
    database: Database, caller: Caller, job_id: str, name: str, kind: str, *, version: int
) -> FigureRecord | None:
    """The figure as this version drew it before; None if it has not. Raises NotFound if there is no such job."""
    with database.read() as connection:
        job = jobs.find(connection, job_id)
        if job is None or not sees(caller, job):
            raise NotFound(f"there is no job {job_id}")
        return figures.find(connection, job_id, name, kind, version=version)


def make_figure(
    database: Database, caller: Caller, job_id: str, name: str, kind: str, *, version: int, draw: Draw, now: datetime
) -> FigureRecord:
    """Draw and keep, unless another did meanwhile. Raises NotFound, with a code that says whether to ask again."""
    found = kept_figure(database, caller, job_id, name, kind, version=version)
    if found is not None:
        return found
    data = draw(*figure_inputs(database, caller, job_id))
    record = FigureRecord(data=data, digest=hashlib.sha256(data).hexdigest())
    with database.write() as connection:
        if jobs.find(connection, job_id) is not None:
            figures.keep(connection, job_id, name, kind, record, version=version, now=now)
    return record


def figure_inputs(database: Database, caller: Caller, job_id: str) -> tuple[DatasetContent, JobDetail]:
    """What a job's figures are drawn from. Raises NotFound until the job has a result."""
    with database.read() as connection:
        detail = jobs.detail(connection, job_id)
        if detail is None or not sees(caller, detail.job):
            raise NotFound(f"there is no job {job_id}")
        loaded = None if detail.result is None else datasets.load(connection, detail.job.dataset_id)
    if loaded is None:
        state = detail.job.state
        if state in (State.QUEUED, State.RUNNING):
            raise NotFound(f"job {job_id} is {state}: it has no figures yet", code="result_not_ready")
        if state is State.SUCCEEDED:
            raise NotFound(
                f"the result of job {job_id} was removed by retention; its verdict is kept", code="no_result"
            )
        raise NotFound(f"job {job_id} {state}: it has no figures", code="no_result")
    return loaded[0], detail
