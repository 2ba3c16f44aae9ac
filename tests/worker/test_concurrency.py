"""Eight writers and eight readers on one installation at once, with workers running: nobody is told "locked"."""

import resource
import statistics
import sys
import threading
import time
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import pytest

from service.errors import Overloaded
from service.settings import Settings
from service.store import jobs
from service.store.database import Database, open_database
from service.store.migrate import migrate
from service.store.records import JobFilter
from service.store.tables import FINAL
from service.store.transport import open_transport
from tests.jobs import Desk
from tests.worker.processes import Workers, until

CROWD = 8


@pytest.mark.parametrize("seconds", [pytest.param(6, marks=pytest.mark.long), pytest.param(60, marks=pytest.mark.slow)])
def test_readers_and_writers(settings: Settings, seconds: int) -> None:
    settings = settings.model_copy(update={"log_level": "ERROR"})
    database, transport = open_database(settings, durable=True), open_transport(settings)
    migrate(database)
    desk = Desk(database, transport, settings, datetime.now(UTC))
    posted: list[str] = []
    reads: list[float] = []
    failures: list[BaseException] = []
    over = threading.Event()

    def write(number: int) -> None:
        seed = number
        while not over.is_set():
            posted.append(desk.put(seed))
            seed += CROWD
            over.wait(0.02)

    def read(_number: int) -> None:
        while not over.is_set():
            began = time.monotonic()
            page(database)
            reads.append(time.monotonic() - began)
            over.wait(0.01)

    def guarded(step: Callable[[int], None], number: int) -> None:
        try:
            step(number)
        except BaseException as error:  # noqa: BLE001 (whatever a caller would be told)
            failures.append(error)

    crowd = [threading.Thread(target=guarded, args=(step, n)) for step in (write, read) for n in range(CROWD)]
    with Workers(settings):
        for one in crowd:
            one.start()
        over.wait(seconds)
        over.set()
        for one in crowd:
            one.join()
        assert failures == []
        until(lambda: all(desk.job(job_id).state in FINAL for job_id in posted[:50]), seconds=60, every=0.2)
    p99 = statistics.quantiles(reads, n=100)[98]
    sys.stderr.write(
        f"\n{len(posted)} posts, {len(reads)} reads in {seconds} s;"
        f" read median {1e3 * statistics.median(reads):.1f} ms, p99 {1e3 * p99:.1f} ms\n"
    )
    assert len(posted) > CROWD
    assert len(reads) > CROWD
    transport.close()
    database.close()


def page(database: Database) -> None:
    """One page of the history and the newest job, as a caller reads them."""
    with database.read() as connection:
        found = jobs.newest(connection, JobFilter(), before=None, limit=50)
        for job in found.items[:1]:
            jobs.detail(connection, job.id)


@pytest.mark.long
def test_a_full_queue_refuses_and_what_was_accepted_finishes(settings: Settings) -> None:
    """Overload: posts beyond the limit are refused with a time to come back, and memory stays flat meanwhile."""
    settings = settings.model_copy(update={"queue_depth": 40, "log_level": "ERROR"})
    database, transport = open_database(settings, durable=True), open_transport(settings)
    migrate(database)
    desk = Desk(database, transport, settings, datetime.now(UTC))
    accepted: list[str] = []
    refused: list[Overloaded] = []
    with Workers(settings):
        after_hundred = 0
        for seed in range(1500):
            try:
                accepted.append(desk.put(seed))
            except Overloaded as error:
                refused.append(error)
            if seed == 100:
                after_hundred = memory()
        grown = memory() - after_hundred
        until(lambda: all(desk.job(job_id).state in FINAL for job_id in accepted), seconds=90, every=0.2)
    assert {error.code for error in refused} == {"queue_full"}
    assert min(error.retry_after for error in refused) > 0
    assert len(accepted) >= settings.queue_depth
    assert desk.recorded() == (len(accepted), len(accepted))
    assert grown < 30 * 2**20
    transport.close()
    database.close()


def memory() -> int:
    """Resident bytes of this process (Linux)."""
    return int(Path("/proc/self/statm").read_text().split()[1]) * resource.getpagesize()
