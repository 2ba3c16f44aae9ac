"""Many callers who wait, event streams, repeated posts: what is promised of one must hold for a thousand at once."""

import asyncio
import json
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import httpx
import pytest

from service.settings import Settings
from tests.web.service import Service, running

DATASET: dict[str, Any] = {
    "subject": "PT-1",
    "x": [0, 1, 2, 3, 4, 5, 6, 7],
    "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02],
}
MANY, JOBS = 1000, 50
NO_LIMITS = httpx.Limits(max_connections=None, max_keepalive_connections=None)


def wait_for(condition: Any, seconds: float = 60) -> Any:
    until = time.monotonic() + seconds
    while time.monotonic() < until:
        found = condition()
        if found:
            return found
        time.sleep(0.01)
    raise AssertionError("did not happen in time")


async def at_once(address: str, calls: list[dict[str, Any]]) -> list[httpx.Response]:
    async with httpx.AsyncClient(base_url=address, timeout=280, limits=NO_LIMITS) as http:
        return await asyncio.gather(*(http.post("/v1/jobs", **one) for one in calls))


@pytest.mark.long
def test_a_thousand_posts_with_one_key_make_one_job(service_on_either: Service) -> None:
    service = service_on_either
    call = {"json": {"dataset": DATASET}, "headers": {"Idempotency-Key": "one"}}
    answers = asyncio.run(at_once(service.address, [call] * MANY))
    assert {answer.status_code for answer in answers} == {202}
    assert len({answer.json()["id"] for answer in answers}) == 1
    assert len(service.http.get("/v1/jobs").json()["items"]) == 1
    assert service.work() == 1


@pytest.mark.long
def test_a_thousand_who_wait_hold_no_thread_and_cost_one_query_a_tick(service: Service) -> None:
    """1,000 callers wait for 50 jobs, 20 for each: no thread each, one query a tick, and everything answers."""
    before = threading.active_count()
    done = list[httpx.Response]()
    calls = [
        {
            "json": {"dataset": DATASET, "subject": f"PT-{i % JOBS}"},
            "headers": {"Prefer": "wait=250", "Idempotency-Key": f"key-{i % JOBS}"},
        }
        for i in range(MANY)
    ]
    object.__setattr__(service.settings, "wait_seconds", 250)
    caller = threading.Thread(target=lambda: done.extend(asyncio.run(at_once(service.address, calls))))
    caller.start()
    waiting = service.context.waiting
    wait_for(lambda: waiting.watchers == MANY, 120)
    assert waiting.watched == JOBS
    # Threads of the pool that serves everybody, 40 at most, and this test's own.
    assert threading.active_count() <= before + 45
    queries, ticks = waiting.queries, waiting.ticks
    for _ in range(20):
        assert service.http.get("/readyz").status_code == 200
    wait_for(lambda: waiting.ticks >= ticks + 5)
    assert waiting.queries - queries <= waiting.ticks - ticks + 1
    job = service.http.get("/v1/jobs", params={"limit": 1}).json()["items"][0]
    assert service.http.delete(f"/v1/jobs/{job['id']}").status_code == 200
    with service.working():
        caller.join()
    states = [(answer.status_code, answer.json()["state"]) for answer in done]
    assert states.count((200, "cancelled")) == MANY // JOBS
    assert states.count((200, "succeeded")) == MANY - MANY // JOBS
    wait_for(lambda: waiting.watched == 0)
    queries = waiting.queries
    time.sleep(0.3)
    assert waiting.queries <= queries + 1  # nobody waits: nobody asks


def test_a_database_that_is_away_for_a_moment_ends_no_wait(service: Service, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever the database says at one tick, who waits is told at a later one."""
    waiting, fail = service.context.waiting, [True] * 3
    real = waiting._query

    def query(ids: list[str]) -> Any:
        if fail:
            fail.pop()
            service.context.database.reader.dispose()
            with service.context.database.read() as connection:
                connection.exec_driver_sql("SELECT * FROM no_such_table")
        return real(ids)

    monkeypatch.setattr(waiting, "_query", query)
    with service.working():
        answer = service.http.post("/v1/jobs", json={"dataset": DATASET}, headers={"Prefer": "wait=50"})
    assert (answer.status_code, fail) == (200, [])


def events_of(lines: Iterator[str]) -> Iterator[dict[str, Any]]:
    event: dict[str, Any] = {}
    for line in lines:
        if line.startswith(":"):
            continue
        if not line:
            if event:
                yield event
            event = {}
            continue
        name, _, value = line.partition(": ")
        event[name] = json.loads(value) if name == "data" else value


@contextmanager
def following(service: Service, job_id: str, last: str | None = None) -> Iterator[Iterator[dict[str, Any]]]:
    headers = {} if last is None else {"Last-Event-ID": last}
    with httpx.Client(base_url=service.address, timeout=30) as http:
        with http.stream("GET", f"/v1/jobs/{job_id}/events", headers=headers) as answer:
            assert answer.status_code == 200
            assert answer.headers["content-type"].startswith("text/event-stream")
            yield events_of(answer.iter_lines())


def post(service: Service, **more: Any) -> str:
    answer = service.http.post("/v1/jobs", json={"dataset": DATASET} | more)
    assert answer.status_code == 202
    return str(answer.json()["id"])


def test_a_stream_tells_what_happens_and_ends_with_the_job(service: Service) -> None:
    job_id = post(service)
    with following(service, job_id) as events:
        first = next(events)
        assert first["event"] == "queued"
        with service.working():
            rest = [one for one in events if one["event"] != "progress"]
    assert [one["event"] for one in rest] == ["started", "succeeded"]
    numbers = [int(one["id"]) for one in [first, *rest]]
    assert numbers == sorted(set(numbers))
    assert rest[-1]["data"]["verdict"] == service.http.get(f"/v1/jobs/{job_id}").json()["verdict"]
    with following(service, job_id) as events:  # all of it once more, now that it is over
        assert [one["id"] for one in events] == [first["id"], *(one["id"] for one in rest)]


def test_a_stream_goes_on_behind_the_last_event(service: Service) -> None:
    job_id = post(service)
    with following(service, job_id) as events:
        first = next(events)
    service.work()
    with following(service, job_id, first["id"]) as events:
        assert [one["event"] for one in events] == ["started", "succeeded"]
    with following(service, job_id, str(2**62)) as events:
        assert list(events) == []
    for bad in ("x", "-1", "1.5", str(2**70)):
        answer = service.http.get(f"/v1/jobs/{job_id}/events", headers={"Last-Event-ID": bad})
        assert answer.status_code == 422
        assert answer.json()["errors"][0]["pointer"] == "/header/Last-Event-ID"


def test_a_stream_tells_of_cancelling(service: Service) -> None:
    job_id = post(service)
    with following(service, job_id) as events:
        next(events)
        service.http.delete(f"/v1/jobs/{job_id}")
        assert [one["event"] for one in events] == ["cancelled"]


def test_who_goes_away_leaves_nothing_behind(service: Service) -> None:
    """Streams and waits that callers break off are let go of at once."""
    job_id = post(service)
    with following(service, job_id) as events:
        next(events)
        wait_for(lambda: service.context.waiting.watched == 1)
    wait_for(lambda: service.context.waiting.watched == 0)
    with pytest.raises(httpx.ReadTimeout):
        service.http.post("/v1/jobs", json={"dataset": DATASET}, headers={"Prefer": "wait=50"}, timeout=0.5)
    wait_for(lambda: service.context.waiting.watched == 0)


def test_stopping_answers_who_waits_and_ends_streams(tmp_path: Any) -> None:
    answers, ended = list[httpx.Response](), list[list[str]]()
    with running(Settings(data_dir=tmp_path)) as service:
        job_id = post(service)

        def wait() -> None:
            body = {"dataset": DATASET, "subject": "PT-2"}
            answers.append(
                httpx.post(f"{service.address}/v1/jobs", json=body, headers={"Prefer": "wait=60"}, timeout=90)
            )

        def follow() -> None:
            with following(service, job_id) as events:
                ended.append([one["event"] for one in events])

        threads = [threading.Thread(target=wait), threading.Thread(target=follow)]
        for thread in threads:
            thread.start()
        wait_for(lambda: service.context.waiting.watched == 2)
        began = time.monotonic()
    for thread in threads:
        thread.join()
    assert time.monotonic() - began < 30  # of the 60 that were asked for
    assert [(one.status_code, one.json()["state"]) for one in answers] == [(202, "queued")]
    assert ended == [["queued"]]
