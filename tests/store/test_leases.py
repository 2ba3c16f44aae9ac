"""Claim, renew, give back, end, cancel: on both engines, with the clock in hand."""

import threading
from collections.abc import Callable
from datetime import timedelta

import pytest
from sqlalchemy import Connection

from service.store import leases
from service.store.records import Claim
from service.store.tables import State
from tests.jobs import Desk, at


def test_a_claim_takes_the_job_and_counts_the_attempt(desk: Desk) -> None:
    job_id = desk.put(by="anna")
    claim = desk.took("w1", seconds=1)
    assert (claim.job_id, claim.worker, claim.attempt, claim.submitted_by) == (job_id, "w1", 1, "anna")
    assert (claim.queued_at, claim.started_at) == (at(0), at(1))
    job = desk.job(job_id)
    assert (job.state, job.worker, job.attempts, job.started_at) == (State.RUNNING, "w1", 1, at(1))
    assert desk.history(job_id) == ["queued", "started"]


def test_a_job_is_taken_once(desk: Desk) -> None:
    desk.put()
    assert desk.take("w1") is not None
    assert desk.take("w2") is None


def test_many_claims_at_once_never_take_one_job_twice(desk: Desk) -> None:
    ids = {desk.put(seed) for seed in range(24)}
    taken: list[Claim] = []
    gate = threading.Barrier(6)

    def worker(number: int) -> None:
        gate.wait()
        while (claim := desk.take(f"w{number}")) is not None:
            taken.append(claim)

    threads = [threading.Thread(target=worker, args=(number,)) for number in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(claim.job_id for claim in taken) == sorted(ids)
    assert len({claim.token for claim in taken}) == len(ids)


def test_a_job_is_not_taken_before_its_time(desk: Desk) -> None:
    job_id = desk.put()
    claim = desk.took()
    with desk.database.write() as connection:
        leases.give_back(connection, job_id, claim.token, run_after=at(5))
    assert desk.take(seconds=4.9) is None
    again = desk.took(seconds=5)
    assert (again.job_id, again.attempt) == (job_id, 2)
    assert again.token != claim.token


def test_an_attempt_given_back_without_fault_does_not_count(desk: Desk) -> None:
    job_id = desk.put()
    claim = desk.took()
    with desk.database.write() as connection:
        leases.give_back(connection, job_id, claim.token, run_after=at(0), counted=False)
    assert desk.took().attempt == 1


STEPS: dict[str, Callable[[Connection, str, str], None]] = {
    "renew": lambda c, job, token: leases.renew(c, job, token, lease_until=at(99), progress=("fit", 0, 1)),
    "give_back": lambda c, job, token: leases.give_back(c, job, token, run_after=at(99)),
    "succeed": lambda c, job, token: leases.succeed(c, job, token, now=at(1), verdict="adequate", degree=1),
    "fail": lambda c, job, token: leases.fail(c, job, token, now=at(1), error="{}"),
}


@pytest.mark.parametrize("step", STEPS)
def test_a_void_token_changes_nothing(desk: Desk, step: str) -> None:
    job_id = desk.put()
    old = desk.took("w1")
    with desk.database.write() as connection:
        leases.give_back(connection, job_id, old.token, run_after=at(0))
    new = desk.took("w2")
    before = desk.job(job_id)
    with pytest.raises(leases.Stale), desk.database.write() as connection:
        STEPS[step](connection, job_id, old.token)
    assert desk.job(job_id) == before
    with desk.database.read() as connection:
        assert leases.is_held(connection, job_id, new.token)
        assert not leases.is_held(connection, job_id, old.token)


def test_renewing_moves_the_lease_and_tells_progress(desk: Desk) -> None:
    job_id = desk.put()
    claim = desk.took()
    with desk.database.write() as connection:
        leases.renew(connection, job_id, claim.token, lease_until=at(60), progress=("cross_validate", 3, 10))
    with desk.database.read() as connection:
        (held,) = leases.running(connection)
    assert (held.id, held.token, held.lease_until) == (job_id, claim.token, at(60))
    job = desk.job(job_id)
    assert (job.stage, job.stage_done, job.stage_of) == ("cross_validate", 3, 10)


def test_cancelling_voids_the_token(desk: Desk) -> None:
    job_id = desk.put()
    claim = desk.took()
    with desk.database.write() as connection:
        assert leases.cancel(connection, job_id, now=at(2)) == State.RUNNING
        assert leases.cancel(connection, job_id, now=at(3)) is None
    with pytest.raises(leases.Stale), desk.database.write() as connection:
        leases.renew(connection, job_id, claim.token, lease_until=at(9), progress=None)
    job = desk.job(job_id)
    assert (job.state, job.finished_at) == (State.CANCELLED, at(2))
    assert desk.take() is None


def test_due_counts_what_may_run_now(desk: Desk) -> None:
    desk.put(1)
    later = desk.put(2)
    claims = [desk.took(), desk.took()]
    token = next(claim.token for claim in claims if claim.job_id == later)
    desk.put(3)
    with desk.database.write() as connection:
        leases.give_back(connection, later, token, run_after=at(0) + timedelta(seconds=10))
        assert leases.due(connection, at(9)) == 1
        assert leases.due(connection, at(10)) == 2
