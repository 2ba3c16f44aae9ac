"""The heartbeat, one look at a time: renew, tell progress, notice a void claim."""

from datetime import UTC, datetime, timedelta

import pytest

from service.errors import Overloaded
from service.store import leases
from service.store.database import Database
from service.worker.heartbeat import Heartbeat
from service.workflows.cancel import cancel_job
from service.workflows.run import run_job
from tests.jobs import MACHINE, Desk, at


class Watched(Heartbeat):
    """Counts what would have ended the process."""

    def __init__(self, desk: Desk) -> None:
        self.left = 0
        super().__init__(desk.settings, desk.database, leave=self._count)

    def _count(self) -> None:
        self.left += 1


@pytest.fixture
def heartbeat(desk: Desk) -> Watched:
    """Not started: the test does the looking."""
    return Watched(desk)


def lease(desk: Desk) -> datetime:
    with desk.database.read() as connection:
        (held,) = leases.running(connection)
    return held.lease_until


def test_without_a_job_a_look_does_nothing(heartbeat: Watched) -> None:
    heartbeat.look(0.0)
    assert heartbeat.left == 0


def test_the_lease_is_renewed_every_quarter_of_it(desk: Desk, heartbeat: Watched) -> None:
    desk.put()
    claim = desk.took()
    before = lease(desk)
    with heartbeat.holding(claim):
        began = heartbeat._renewed
        heartbeat.look(began + 0.9 * desk.settings.heartbeat_seconds)
        assert lease(desk) == before
        heartbeat.look(began + desk.settings.heartbeat_seconds)
        assert lease(desk) != before
        assert abs(lease(desk) - datetime.now(UTC) - timedelta(seconds=desk.settings.lease_seconds)) < timedelta(
            seconds=60
        )
    assert heartbeat.left == 0


def test_progress_is_told_at_the_next_look(desk: Desk, heartbeat: Watched) -> None:
    job_id = desk.put()
    with heartbeat.holding(desk.took()):
        heartbeat.say("cross_validate", 2, 10)
        heartbeat.look(heartbeat._renewed)
        job = desk.job(job_id)
        assert (job.stage, job.stage_done, job.stage_of) == ("cross_validate", 2, 10)


def test_a_cancelled_job_ends_the_process_at_the_second_look(desk: Desk, heartbeat: Watched) -> None:
    job_id = desk.put()
    with heartbeat.holding(desk.took()):
        cancel_job(desk.database, job_id, by="anna", now=at(1))
        heartbeat.look(heartbeat._renewed)
        assert heartbeat.left == 0
        heartbeat.look(heartbeat._renewed)
        assert heartbeat.left == 1


def test_a_job_that_just_ended_does_not_end_the_process(desk: Desk, heartbeat: Watched) -> None:
    desk.put()
    desk.put(1)
    claim = desk.took()
    with heartbeat.holding(claim):
        run_job(desk.database, claim, MACHINE, clock=lambda: at(1))
        heartbeat.look(heartbeat._renewed)
    with heartbeat.holding(desk.took()):
        heartbeat.look(heartbeat._renewed)
        heartbeat.look(heartbeat._renewed)
    assert heartbeat.left == 0


def test_a_database_that_is_away_is_no_void_claim(
    desk: Desk, heartbeat: Watched, monkeypatch: pytest.MonkeyPatch
) -> None:
    desk.put()

    def away(_self: Database) -> None:
        raise Overloaded("the database cannot be reached", retry_after=5, code="database_away")

    with heartbeat.holding(desk.took()):
        monkeypatch.setattr(Database, "read", away)
        for _ in range(5):
            heartbeat.look(heartbeat._renewed)
    assert heartbeat.left == 0
