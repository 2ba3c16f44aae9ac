"""The queue's transport: hints go in and come out; a queue that is away is no error of the caller."""

import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from service.errors import Unusable
from service.settings import Settings
from service.store.tables import State
from service.store.transport import FILE_NAME, QueueAway, Transport, open_transport
from service.worker.consumer import JobWorker
from service.worker.desk import Desk as WorkerDesk
from service.worker.heartbeat import Heartbeat
from tests.jobs import MACHINE, Desk, at


@pytest.fixture
def other(settings: Settings, transport: Transport) -> Iterator[Transport]:
    """As another process sees the same queue."""
    assert transport.size() == 0
    opened = open_transport(settings)
    yield opened
    opened.close()


def test_what_one_sends_another_receives_once(transport: Transport, other: Transport) -> None:
    assert transport.send("one", 0)
    assert transport.send("two", 5)
    assert other.size() == 2
    assert other.receive()
    assert transport.receive()
    assert other.size() == 0
    assert not other.receive()


def test_on_postgresql_receiving_waits(transport: Transport, engine: str) -> None:
    assert transport.waits == (engine == "postgresql")


def test_a_queue_that_is_away(transport: Transport, monkeypatch: pytest.MonkeyPatch) -> None:
    def away(*_: Any) -> None:
        raise OSError("no such host")

    for name in ("enqueue", "dequeue", "queue_size"):
        monkeypatch.setattr(transport.huey.storage, name, away)
    assert not transport.send("one", 0)
    assert transport.size() is None
    with pytest.raises(QueueAway):
        transport.receive()


def test_a_closed_transport_opens_again(transport: Transport) -> None:
    transport.send("one", 0)
    transport.close()
    assert transport.size() == 1


def test_a_damaged_file_is_made_anew(tmp_path: Path) -> None:
    (tmp_path / FILE_NAME).write_bytes(b"not a database" * 1000)
    opened = open_transport(Settings(data_dir=tmp_path, database_url=None))
    assert opened.send("one", 0)
    assert opened.size() == 1
    opened.close()


def test_a_server_that_is_away_is_told(tmp_path: Path) -> None:
    with pytest.raises(Unusable, match="queue"):
        open_transport(Settings(data_dir=tmp_path, database_url="postgresql+psycopg://x@127.0.0.1:1/none"))


def test_workers_look_for_themselves_while_the_queue_is_away(
    desk: Desk, transport: Transport, monkeypatch: pytest.MonkeyPatch
) -> None:
    def away(_self: Transport) -> bool:
        raise QueueAway("no such file")

    job_id = desk.put()
    heartbeat = Heartbeat(desk.settings, desk.database)
    worker = JobWorker(
        desk.settings,
        transport,
        huey=transport.huey,
        stop_flag=threading.Event(),
        default_delay=0.01,
        max_delay=0.01,
        backoff=1.0,
    )
    worker._desk = WorkerDesk(desk.settings, desk.database, heartbeat, MACHINE, worker="w1", clock=lambda: at(1))
    monkeypatch.setattr(Transport, "receive", away)
    worker.loop()
    assert desk.job(job_id).state == State.SUCCEEDED
