"""What was acknowledged is there after kill -9 of the API, of the workers, of everything at once."""

import os
import subprocess
import sys
from datetime import UTC, datetime

import pytest
from sqlalchemy import select

from service.settings import Settings
from service.store.database import Database, open_database
from service.store.migrate import migrate
from service.store.tables import FINAL, State, jobs
from service.store.transport import Transport, open_transport
from tests.jobs import Desk
from tests.worker.processes import Workers, until

pytestmark = pytest.mark.long
POSTS = 1000


def submitter(settings: Settings, *arguments: str) -> "subprocess.Popen[str]":
    return subprocess.Popen(
        [sys.executable, "-m", "tests.worker.submitter", *arguments],
        env={**os.environ, **settings.environment()},
        stdout=subprocess.PIPE,
        text=True,
    )


def test_every_acknowledged_job_survives_the_death_of_all_processes(settings: Settings) -> None:
    database = open_database(settings, durable=True)
    migrate(database)
    database.close()
    acknowledged: list[str] = []
    with Workers(settings) as workers, submitter(settings, str(2 * POSTS)) as api:
        assert api.stdout is not None
        for line in api.stdout:
            acknowledged.append(line.strip())
            if len(acknowledged) == POSTS:
                break
        api.kill()
        workers.kill()
        acknowledged.extend(line.strip() for line in api.stdout if line.endswith("\n"))
    database, transport = open_database(settings, durable=True), open_transport(settings)
    with database.read() as connection:
        there = {row.id: row.state for row in connection.execute(select(jobs.c.id, jobs.c.state))}
    assert len(acknowledged) >= POSTS
    assert set(acknowledged) <= set(there)
    running = [job_id for job_id, state in there.items() if state == State.RUNNING]
    desk = Desk(database, transport, settings, datetime.now(UTC))
    with Workers(settings):  # those that were in hand, and the first in line
        some = [*running, *acknowledged[:20]]
        until(lambda: all(desk.job(job_id).state in FINAL for job_id in some), seconds=90, every=0.2)
    assert {desk.job(job_id).state for job_id in some} == {State.SUCCEEDED}
    transport.close()
    database.close()


def test_a_job_committed_but_not_answered_still_runs(
    database: Database, transport: Transport, settings: Settings
) -> None:
    """kill -9 of the API between commit and answer: the caller does not know, the job is there and runs."""
    with submitter(settings, "1", "die") as api:
        assert api.wait(60) == -9
        assert api.stdout is not None
        assert api.stdout.read() == ""
    with database.read() as connection:
        (job_id,) = connection.execute(select(jobs.c.id)).scalars()
    assert transport.size() == 0
    desk = Desk(database, transport, settings)
    with Workers(settings):
        until(lambda: desk.job(job_id).state in FINAL)
    assert desk.history(job_id) == ["queued", "started", "succeeded"]
