"""The client of the package against the real service, and against one that is away or overloaded now and then."""

import threading
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
import pytest

import service.client
from service.client import Client, ProblemError
from service.settings import Settings
from service.workflows.callers import create_key
from tests.web.service import Service, running

DATASET: dict[str, Any] = {
    "subject": "PT-1",
    "x": [0, 1, 2, 3, 4, 5, 6, 7],
    "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02],
}


@pytest.fixture
def client(service: Service) -> Iterator[Client]:
    with Client(service.address) as one:
        yield one


def test_from_readings_to_verdict(service: Service, client: Client) -> None:
    stored = client.post_dataset(DATASET)
    assert client.post_dataset(DATASET)["id"] == stored["id"]
    job = client.submit(stored["id"], {"max_degree": 3}, subject="PT-9", priority=5)
    assert (job["state"], job["subject"], job["priority"]) == ("queued", "PT-9", 5)
    seen = list[str]()
    with service.working():
        ended = client.wait(job["id"], progress=lambda one: seen.append(one["state"]))
    assert ended["state"] == "succeeded"
    assert seen[-1] == "succeeded"
    assert client.verdict(job["id"])["verdict"] == ended["verdict"]
    assert [one["id"] for one in client.history(subject="PT-9")] == [job["id"]]


def test_the_service_can_be_left_to_wait(service: Service, client: Client) -> None:
    with service.working():
        assert client.submit(DATASET, wait=30)["state"] == "succeeded"
    assert client.submit(DATASET, wait=1)["state"] == "queued"


def test_waiting_has_an_end(client: Client) -> None:
    job = client.submit(DATASET)
    with pytest.raises(TimeoutError, match="is queued after"):
        client.wait(job["id"], seconds=0.2)


def test_what_is_refused_names_the_field(client: Client) -> None:
    with pytest.raises(ProblemError, match=r"422 invalid_input: /dataset/y") as raised:
        client.submit(DATASET | {"y": [1, 2]})
    assert raised.value.errors[0]["pointer"] == "/dataset/y"
    assert raised.value.request_id
    with pytest.raises(ProblemError, match=r"404 not_found"):
        client.job("none")
    with pytest.raises(ProblemError, match=r"/query/statee is not a known parameter"):
        list(client.history(statee="queued"))


def test_it_holds_a_key(tmp_path: Path) -> None:
    with running(Settings(data_dir=tmp_path)) as service:
        key, _ = create_key(service.database, name="bench", role="submit", now=datetime(2026, 5, 4, tzinfo=UTC))
        with Client(service.address, key=key) as client:
            assert client.submit(DATASET)["submitted_by"] == "bench"
        with Client(service.address) as client, pytest.raises(ProblemError) as raised:
            client.submit(DATASET)
        assert (raised.value.status, raised.value.code) == (401, "unauthenticated")


class Unsteady(httpx.BaseTransport):
    """Fails in turn as it is told, then passes on. With `after`, only once the service has had the request."""

    def __init__(self, failures: list[Callable[[], httpx.Response]], *, after: bool = False) -> None:
        self._real = httpx.HTTPTransport()
        self._failures = failures
        self._after = after
        self.keys = list[str | None]()

    def handle_request(self, request: httpx.Request) -> httpx.Response:
        self.keys.append(request.headers.get("idempotency-key"))
        if self._failures:
            if self._after:
                self._real.handle_request(request).close()
            return self._failures.pop()()
        return self._real.handle_request(request)

    def close(self) -> None:
        self._real.close()


def away() -> httpx.Response:
    raise httpx.ConnectError("nobody there")


def broken() -> httpx.Response:
    raise httpx.ReadError("connection lost")


def busy() -> httpx.Response:
    return httpx.Response(503, headers={"Retry-After": "1"}, json={"code": "overloaded", "detail": "busy"})


@pytest.fixture
def pauses(monkeypatch: pytest.MonkeyPatch) -> list[float]:
    """What it would have slept."""
    taken = list[float]()
    monkeypatch.setattr(service.client.time, "sleep", taken.append)
    return taken


def test_it_tries_again(service: Service, pauses: list[float]) -> None:
    with Client(service.address, transport=Unsteady([away, busy, broken])) as client:
        assert client.submit(DATASET)["state"] == "queued"
    assert len(pauses) == 3
    assert pauses == sorted(pauses)
    assert pauses[1] >= 1  # as it was told
    with Client(service.address) as client:
        assert len(list(client.history())) == 1


@pytest.mark.parametrize("failure", [broken, busy])
def test_a_job_is_made_once_though_the_answer_was_lost(
    service: Service, pauses: list[float], failure: Callable[[], httpx.Response]
) -> None:
    unsteady = Unsteady([failure] * 3, after=True)
    with Client(service.address, transport=unsteady) as client:
        job = client.submit(DATASET)
        assert [one["id"] for one in client.history()] == [job["id"]]
    assert len(set(unsteady.keys[:4])) == 1
    assert unsteady.keys[0] is not None
    assert len(pauses) == 3


def test_it_gives_up(pauses: list[float]) -> None:
    with Client("http://127.0.0.1:9", transport=Unsteady([away] * 100)) as client, pytest.raises(httpx.ConnectError):
        client.submit(DATASET)
    assert len(pauses) == service.client.TRIES - 1
    with Client("http://x", transport=Unsteady([busy] * 100)) as client, pytest.raises(ProblemError, match="503"):
        client.submit(DATASET)


def test_an_answer_that_is_no_json_is_said_to_be_none(pauses: list[float]) -> None:
    def page() -> httpx.Response:
        return httpx.Response(502, text="<html>")

    with Client("http://x", transport=Unsteady([page])) as client, pytest.raises(ProblemError, match="without JSON"):
        client.job("a")
    assert pauses == []


@pytest.mark.parametrize("value", ["Wed, 21 Oct 2026 07:28:00 GMT", "soon", "-5", ""])
def test_any_retry_after_is_survived(service: Service, pauses: list[float], value: str) -> None:
    """RFC 9110 lets it be a date; a proxy may send anything."""

    def refused() -> httpx.Response:
        return httpx.Response(503, headers={"Retry-After": value}, json={})

    with Client(service.address, transport=Unsteady([refused])) as client:
        assert list(client.history()) == []
    assert pauses[0] > 0


def test_threads_may_share_one(service: Service, client: Client) -> None:
    ids = list[str]()
    threads = [
        threading.Thread(target=lambda i=i: ids.append(client.submit(DATASET | {"subject": f"S{i}"})["id"]))
        for i in range(20)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(set(ids)) == 20
    assert service.work() == 20
