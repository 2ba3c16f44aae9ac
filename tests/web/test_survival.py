"""What callers over HTTP rely on: nothing acknowledged is lost when everything is killed, and overload is said."""

import os
import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from tests.web.real import Real, real_service
from tests.worker.processes import PROC, children_of, send, until

pytestmark = pytest.mark.long
CALLERS = 8
POSTS = 1000
ENDED = ("succeeded", "failed", "cancelled")


def body(seed: int) -> dict[str, Any]:
    """A calibration of 30 points, another for each seed."""
    x = np.linspace(0.0, 10.0, 30)
    y = 1.0 + 2.0 * x + 0.03 * x**2 + np.random.default_rng(seed).normal(0.0, 0.05, 30)
    return {"dataset": {"subject": f"gauge-{seed}", "x": x.tolist(), "y": y.tolist()}}


@contextmanager
def callers(address: str, take: Callable[[httpx.Response], None], *, posts: int) -> Iterator[None]:
    """Eight callers that post, each `posts` times or until the service is gone."""

    def call(number: int) -> None:
        with httpx.Client(base_url=address, timeout=60) as http:
            for post in range(posts):
                try:
                    answer = http.post("/v1/jobs", json=body(number * posts + post))
                except httpx.TransportError:
                    return
                take(answer)

    threads = [threading.Thread(target=call, args=(number,)) for number in range(CALLERS)]
    for thread in threads:
        thread.start()
    yield
    for thread in threads:
        thread.join()


def everything(service: Real) -> list[int]:
    """The API, the keeper, the consumer, the workers."""
    found, front = [], [service.process.pid]
    while front:
        found += front
        front = [child for pid in front for child in children_of(pid)]
    return found


def states(service: Real, ids: list[str]) -> list[str]:
    with httpx.Client(base_url=service.address, timeout=60) as http:
        answers = [http.get(f"/v1/jobs/{job_id}") for job_id in ids]
    assert {answer.status_code for answer in answers} == {200}
    return [answer.json()["state"] for answer in answers]


def wait_for_all(service: Real, ids: list[str]) -> None:
    """Until every job has ended; each is asked for until it has."""
    waiting = list(ids)

    def none_waits() -> bool:
        now = states(service, waiting[-50:])  # the last in line
        waiting[-50:] = [job_id for job_id, state in zip(waiting[-50:], now, strict=True) if state not in ENDED]
        return not waiting

    until(none_waits, seconds=180, every=0.2)


def test_every_202_survives_the_death_of_all_processes(tmp_path: Path) -> None:
    acknowledged: list[str] = []

    def take(answer: httpx.Response) -> None:
        assert answer.status_code == 202, answer.text
        acknowledged.append(answer.json()["id"])

    with real_service(tmp_path, log_level="ERROR") as service, callers(service.address, take, posts=POSTS):
        until(lambda: len(acknowledged) >= POSTS, seconds=120)
        send(signal.SIGKILL, everything(service))
    assert len(acknowledged) >= POSTS
    with real_service(tmp_path, log_level="ERROR") as service:
        assert len(states(service, acknowledged)) == len(acknowledged)
        wait_for_all(service, acknowledged)
        assert set(states(service, acknowledged)) == {"succeeded"}


def test_overload_is_said_and_what_was_accepted_ends(tmp_path: Path) -> None:
    accepted: list[str] = []
    refused: list[httpx.Response] = []

    def take(answer: httpx.Response) -> None:
        if answer.status_code == 202:
            accepted.append(answer.json()["id"])
        else:
            refused.append(answer)

    with real_service(tmp_path, queue_depth="40", log_level="ERROR") as service:
        with callers(service.address, take, posts=10):
            pass
        before = resident_bytes(service)
        with callers(service.address, take, posts=250):
            pass
        grown = resident_bytes(service) - before
        wait_for_all(service, accepted)
        assert set(states(service, accepted)) == {"succeeded"}
    assert refused
    assert {answer.status_code for answer in refused} == {503}
    assert {answer.json()["code"] for answer in refused} == {"queue_full"}
    assert all(int(answer.headers["Retry-After"]) >= 1 for answer in refused)
    assert grown < 40e6


def resident_bytes(service: Real) -> int:
    """Resident memory of the API's process (proc(5))."""
    pages = int((PROC / f"{service.process.pid}/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE")
