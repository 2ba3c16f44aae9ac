"""PostgreSQL restarted under load: posts are refused meanwhile, accepted jobs all finish, none twice."""

import signal
import threading
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path

import pytest

from service.errors import Overloaded
from service.settings import Settings
from service.store.database import open_database
from service.store.migrate import migrate
from service.store.tables import FINAL
from service.store.transport import open_transport
from service.worker.supervise import Companion
from tests.jobs import Desk
from tests.postgres import PrivatePostgres
from tests.worker.processes import FIFTY_MILLISECONDS, until
from tests.worker.test_torture import check_everything

pytestmark = pytest.mark.long
PLACES = {"database_away", "database_busy"}


@pytest.fixture
def server(postgres_binaries: Path) -> Iterator[PrivatePostgres]:
    """An instance of this test's own, since it is stopped."""
    instance = PrivatePostgres(postgres_binaries)
    try:
        instance.start()
        yield instance
    finally:
        instance.remove()


def test_restarts_under_load(server: PrivatePostgres, tmp_path: Path) -> None:
    settings = Settings(data_dir=tmp_path, database_url=server.url(), max_attempts=50, log_level="ERROR")
    database = open_database(settings, durable=True)
    migrate(database)
    transport = open_transport(settings)
    desk = Desk(database, transport, settings, datetime.now(UTC))
    ids: list[str] = []
    refused: set[str] = set()
    stopped = threading.Event()

    def post() -> None:
        number = 0
        while not stopped.is_set():
            try:
                ids.append(desk.put(number, points=30, plan=FIFTY_MILLISECONDS))
            except Overloaded as error:
                refused.add(error.code)
            number += 1
            stopped.wait(0.05)

    with Companion(settings):
        poster = threading.Thread(target=post)
        poster.start()
        for how in (signal.SIGINT, signal.SIGQUIT):  # a fast shutdown, then one as after a crash
            done = len(ids) + 20
            until(lambda done=done: len(ids) > done)  # type: ignore[misc]
            server.stop(how)
            stopped.wait(1.0)
            server.start()
        done = len(ids) + 20
        until(lambda: len(ids) > done)
        stopped.set()
        poster.join()
        until(lambda: all(desk.job(job_id).state in FINAL for job_id in ids), seconds=90, every=0.2)
    assert refused
    assert refused <= PLACES
    check_everything(desk, ids, [])
    transport.close()
    database.close()
