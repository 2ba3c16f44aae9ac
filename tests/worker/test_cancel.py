"""Cancelling: what waits, what runs, what has ended."""

import pytest

from service.errors import Conflict, NotFound
from service.store import leases
from service.store.tables import State
from service.workflows.cancel import cancel_job
from service.workflows.run import run_job
from tests.jobs import MACHINE, Desk, at


def test_a_waiting_job_is_cancelled_at_once(desk: Desk) -> None:
    job_id = desk.put()
    job = cancel_job(desk.database, job_id, by="anna", now=at(1))
    assert (job.state, job.finished_at) == (State.CANCELLED, at(1))
    assert desk.take() is None
    assert desk.history(job_id) == ["queued", "cancelled"]


def test_a_running_job_is_cancelled_and_its_outcome_dropped(desk: Desk) -> None:
    job_id = desk.put()
    claim = desk.took()
    assert cancel_job(desk.database, job_id, by="anna", now=at(1)).state == State.CANCELLED
    with pytest.raises(leases.Stale):
        run_job(desk.database, claim, MACHINE, clock=lambda: at(2))
    assert desk.recorded() == (0, 0)
    assert desk.history(job_id) == ["queued", "started", "cancelled"]


def test_cancelling_twice_is_one_event(desk: Desk) -> None:
    job_id = desk.put()
    first = cancel_job(desk.database, job_id, by="anna", now=at(1))
    assert cancel_job(desk.database, job_id, by="bert", now=at(2)) == first
    assert desk.history(job_id) == ["queued", "cancelled"]


def test_a_finished_job_stays_as_it_is(desk: Desk) -> None:
    job_id = desk.put()
    run_job(desk.database, desk.took(), MACHINE, clock=lambda: at(1))
    with pytest.raises(Conflict, match="succeeded"):
        cancel_job(desk.database, job_id, by="anna", now=at(2))
    assert desk.job(job_id).state == State.SUCCEEDED


def test_an_unknown_job_is_not_found(desk: Desk) -> None:
    with pytest.raises(NotFound):
        cancel_job(desk.database, "nothing", by="anna", now=at(0))
