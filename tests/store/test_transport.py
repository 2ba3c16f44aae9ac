"""The queue's transport: hints go in and come out; a queue that is away is no error of the caller."""

from collections.abc import Iterator
from typing import Any

import pytest

from service.settings import Settings
from service.store.transport import QueueAway, Transport, open_transport


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
