"""The sweep at given times: crash, lost message, worker gone or silent, timeout, last attempt."""

import json
from datetime import timedelta

import pytest

from service.store import leases
from service.store.tables import State
from service.store.transport import Transport
from service.workflows.cancel import cancel_job
from service.workflows.run import run_job
from service.workflows.sweep import MOST_MESSAGES, Swept, sweep
from tests.jobs import MACHINE, Desk, at


def swept(desk: Desk, seconds: float, *, gone: tuple[str, ...] = ()) -> Swept:
    return sweep(
        desk.database,
        desk.transport,
        desk.settings,
        now=at(seconds),
        is_gone=lambda name: name in gone,
        end=lambda _name: None,
    )


def drain(transport: Transport) -> int:
    """Messages in the queue, taken off."""
    count = 0
    while transport.size():
        assert transport.receive()
        count += 1
    return count


def test_a_healthy_queue_is_left_alone(desk: Desk) -> None:
    desk.put(1)
    desk.put(2)
    assert drain(desk.transport) == 2
    desk.took("w1", seconds=1)
    desk.took("w2", seconds=1)
    assert swept(desk, 1 + desk.settings.lease_seconds) == Swept()


def test_a_lost_message_is_sent_again(desk: Desk) -> None:
    for seed in range(3):
        desk.put(seed)
    drain(desk.transport)
    assert swept(desk, 1) == Swept(sent=3)
    assert desk.transport.size() == 3
    assert swept(desk, 2) == Swept()


def test_only_as_many_messages_as_are_missing(desk: Desk) -> None:
    for seed in range(5):
        desk.put(seed)
    desk.transport.receive()
    desk.transport.receive()
    assert swept(desk, 1).sent == 2
    assert MOST_MESSAGES >= 1000


def test_a_worker_that_is_gone_frees_its_job_at_once(desk: Desk) -> None:
    job_id = desk.put()
    drain(desk.transport)
    desk.took("w1", seconds=0)
    assert swept(desk, 0.5, gone=("w1",)) == Swept(requeued=1, sent=1)
    assert desk.job(job_id).state == State.QUEUED
    assert desk.took("w2", seconds=0.5).attempt == 2
    assert desk.history(job_id) == ["queued", "started", "requeued", "started"]


def test_a_silent_worker_loses_its_job_when_the_lease_is_over(desk: Desk) -> None:
    """SIGSTOP, a cut network, a machine that is gone: nothing can be known but the time."""
    job_id = desk.put()
    silent = desk.took("w1")
    lease = desk.settings.lease_seconds
    assert swept(desk, lease).requeued == 0
    assert swept(desk, lease + 0.1).requeued == 1
    second = desk.took("w2", seconds=lease + 1)
    run_job(desk.database, second, MACHINE, clock=lambda: at(lease + 2))
    with pytest.raises(leases.Stale):
        run_job(desk.database, silent, MACHINE, clock=lambda: at(lease + 3))
    assert desk.recorded() == (1, 1)
    assert desk.history(job_id) == ["queued", "started", "requeued", "started", "succeeded"]


def test_a_renewed_lease_keeps_the_job(desk: Desk) -> None:
    job_id = desk.put()
    claim = desk.took()
    with desk.database.write() as connection:
        leases.renew(connection, job_id, claim.token, lease_until=at(100), progress=None)
    assert swept(desk, 99).requeued == 0


def test_a_job_that_ran_too_long_is_failed_not_run_again(desk: Desk) -> None:
    """The worker's watchdog has ended the process; the sweep finds it gone, and the time used up."""
    job_id = desk.put()
    desk.took("w1")
    assert swept(desk, desk.settings.job_seconds + 0.01, gone=("w1",)) == Swept(timed_out=1)
    job = desk.job(job_id)
    assert job.state == State.FAILED
    assert json.loads(job.error or "")["code"] == "timed_out"
    assert desk.history(job_id) == ["queued", "started", "failed"]


def test_a_job_that_keeps_killing_its_worker_is_failed_in_the_end(desk: Desk) -> None:
    job_id = desk.put()
    clock = 0.0
    for attempt in range(1, desk.settings.max_attempts + 1):
        assert desk.took(f"w{attempt}", seconds=clock).attempt == attempt
        outcome = swept(desk, clock, gone=(f"w{attempt}",))
        clock += 10
    assert outcome == Swept(given_up=1)
    job = desk.job(job_id)
    assert (job.state, job.attempts) == (State.FAILED, desk.settings.max_attempts)
    error = json.loads(job.error or "")
    assert error["code"] == "worker_lost"
    assert (
        error["message"] == "its worker was lost in attempt 5, the last that it gets"
    )  # of earlier ones it says nothing
    assert desk.history(job_id) == ["queued", *["started", "requeued"] * 4, "started", "failed"]


def test_a_job_waiting_for_its_next_attempt_gets_its_message_when_the_time_comes(desk: Desk) -> None:
    desk.put()
    drain(desk.transport)
    desk.took("w1")
    assert swept(desk, 0, gone=("w1",)).sent == 1
    drain(desk.transport)
    desk.took("w2")
    assert swept(desk, 0, gone=("w2",)) == Swept(requeued=1)
    wait = desk.settings.retry_seconds * 2
    assert swept(desk, 0.5 * wait).sent == 0
    assert swept(desk, wait).sent == 1


def test_two_sweeps_at_once_requeue_once(desk: Desk) -> None:
    job_id = desk.put()
    claim = desk.took("w1")
    with desk.database.write() as connection:
        leases.give_back(connection, job_id, claim.token, run_after=at(0))
    with pytest.raises(leases.Stale), desk.database.write() as connection:
        leases.give_back(connection, job_id, claim.token, run_after=at(0) + timedelta(seconds=1))
    assert swept(desk, 60, gone=("w1",)).requeued == 0


def test_a_cancelled_job_is_not_brought_back(desk: Desk) -> None:
    job_id = desk.put()
    desk.took("w1")
    cancel_job(desk.database, job_id, by="anna", now=at(1))
    assert swept(desk, 60, gone=("w1",)) == Swept()
    assert desk.job(job_id).state == State.CANCELLED
