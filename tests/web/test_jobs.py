"""Jobs over HTTP: from post to verdict, waiting, the history."""

import hashlib
import threading
from pathlib import Path
from typing import Any

import pytest
import rfc8785
from pydantic import TypeAdapter

from service.client import Client, ProblemError
from service.settings import Settings
from service.web.schemas.common import PageOf
from service.web.schemas.datasets import DatasetView
from service.web.schemas.jobs import JobSummary, JobView, Verdict
from tests.web.service import Service, running

DATASET: dict[str, Any] = {
    "subject": "PT-1",
    "x": [0, 1, 2, 3, 4, 5, 6, 7],
    "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02],
}


def post(service: Service, **changes: Any) -> dict[str, Any]:
    answer = service.http.post("/v1/jobs", json={"dataset": DATASET} | changes)
    assert answer.status_code == 202
    return dict(answer.json())


def test_answers_are_what_the_document_says(service: Service) -> None:
    posted = service.http.post("/v1/datasets", json=DATASET)
    TypeAdapter(DatasetView).validate_json(posted.content)
    waiting = service.http.post("/v1/jobs", json={"dataset_id": posted.json()["id"]})
    TypeAdapter(JobView).validate_json(waiting.content)
    service.work()
    done = service.http.get(waiting.headers["location"])
    view = TypeAdapter(JobView).validate_json(done.content)
    assert view.state == "succeeded"
    assert view.result is not None
    assert view.result.chosen_degree == 1
    TypeAdapter(PageOf[JobSummary]).validate_json(service.http.get("/v1/jobs").content)
    TypeAdapter(Verdict).validate_json(service.http.get(f"/v1/jobs/{view.id}/verdict").content)


@pytest.mark.parametrize(
    "changes",
    [
        {},
        {"subject": "PT-2", "priority": 7, "plan": {"max_degree": 3}},
        {"notify_url": "http://127.0.0.1:9/told"},
    ],
    ids=["bare", "with all", "notified"],
)
def test_the_first_answer_is_what_is_read_afterwards(tmp_path: Path, changes: dict[str, Any]) -> None:
    """It is made of what was stored, without reading that again."""
    settings = Settings(data_dir=tmp_path, notify_private=True, notify_secret="whsec_" + 32 * "A")
    with running(settings) as service:
        posted = service.http.post("/v1/jobs", json={"dataset": DATASET} | changes)
        assert posted.status_code == 202, posted.text
        assert posted.json() == service.http.get(posted.headers["location"]).json()


def test_a_post_sent_again_is_answered_with_the_job_as_it_is_now(service: Service) -> None:
    def send() -> dict[str, Any]:
        key = {"Idempotency-Key": "one"}
        return dict(service.http.post("/v1/jobs", json={"dataset": DATASET}, headers=key).json())

    first = send()
    service.work()
    again = send()
    assert (first["id"], first["state"]) == (again["id"], "queued")
    assert again == service.http.get(f"/v1/jobs/{first['id']}").json()
    assert again["state"] == "succeeded"


def test_digests_can_be_verified_by_anyone(service: Service) -> None:
    """SHA-256 over the canonical JSON (RFC 8785) of what the service answers, nothing else needed."""
    job = post(service)
    service.work()
    done = service.http.get(f"/v1/jobs/{job['id']}").json()
    result = dict(done["result"])
    origin = result.pop("provenance")
    assert hashlib.sha256(rfc8785.dumps(result)).hexdigest() == origin["result_digest"]
    assert hashlib.sha256(rfc8785.dumps(done["plan"])).hexdigest() == origin["plan_digest"] == done["plan_digest"]
    floats = {name: [float(v) for v in DATASET[name]] for name in ("x", "y")}
    assert hashlib.sha256(rfc8785.dumps(DATASET | floats)).hexdigest() == origin["dataset_digest"]
    verdict = service.http.get(f"/v1/jobs/{job['id']}/verdict")
    assert f'"{hashlib.sha256(verdict.content).hexdigest()}"' == verdict.headers["etag"]
    assert verdict.json()["result_digest"] == origin["result_digest"]


def test_verdicts_are_chained(service: Service) -> None:
    digests: list[str | None] = [None]
    for i in range(3):
        job = post(service, dataset=DATASET | {"subject": f"PT-{i}"})
        service.work()
        answer = service.http.get(f"/v1/jobs/{job['id']}/verdict")
        assert answer.json()["previous"] == digests[-1]
        digests.append(hashlib.sha256(answer.content).hexdigest())


def test_wait_answers_when_the_job_has_ended(service: Service) -> None:
    with service.working():
        answer = service.http.post("/v1/jobs", json={"dataset": DATASET}, headers={"Prefer": "wait=30"})
    assert answer.status_code == 200
    assert answer.json()["state"] == "succeeded"
    assert answer.headers["preference-applied"] == "wait=30"


@pytest.mark.parametrize(
    ("prefer", "applied"),
    [
        ("wait=1", "wait=1"),
        ('respond-async, wait="1"', "respond-async, wait=1"),
        ("handling=strict, WAIT = 1; x=y", "wait=1"),
        ('note="a, wait=30", wait=1, wait=20', "wait=1"),
    ],
)
def test_wait_gives_up_after_the_time_asked_for(service: Service, prefer: str, applied: str) -> None:
    answer = service.http.post("/v1/jobs", json={"dataset": DATASET}, headers={"Prefer": prefer})
    assert answer.status_code == 202
    assert answer.json()["state"] == "queued"
    assert answer.headers["preference-applied"] == applied


@pytest.mark.parametrize("prefer", ["wait=x", "wait", 'x; wait=30, "wait=30"', "wait=-1", "wait=1.5", 'wait="', ""])
def test_what_cannot_be_read_of_prefer_is_ignored(service: Service, prefer: str) -> None:
    answer = service.http.post("/v1/jobs", json={"dataset": DATASET}, headers={"Prefer": prefer})
    assert answer.status_code == 202
    assert "preference-applied" not in answer.headers


def test_many_wait_at_once_and_the_service_still_answers(service: Service) -> None:
    """200 waiting callers, more than there are threads, hold up nobody."""
    states: list[str] = []

    def wait() -> None:
        answer = service.http.post("/v1/jobs", json={"dataset": DATASET}, headers={"Prefer": "wait=50"}, timeout=60)
        states.append(answer.json()["state"])

    threads = [threading.Thread(target=wait) for _ in range(90)]
    for thread in threads:
        thread.start()
    assert service.http.get("/healthz").status_code == 200
    assert service.http.get("/readyz").status_code == 200
    with service.working():
        for thread in threads:
            thread.join()
    assert states == ["succeeded"] * 90


def test_history_is_filtered_and_paged(service: Service) -> None:
    ids = [post(service, subject=f"PT-{i % 2}")["id"] for i in range(7)]
    with Client(service.address) as client:
        assert [job["id"] for job in client.history(limit=2)] == ids[::-1]
        assert [job["id"] for job in client.history(subject="PT-0", limit=3)] == ids[::2][::-1]
        assert list(client.history(state="succeeded")) == []
        service.work()
        assert len(list(client.history(state="succeeded", verdict="adequate"))) == 7
        middle = client.job(ids[3])["queued_at"]
        assert [job["id"] for job in client.history(since=middle)] == ids[3:][::-1]
        assert [job["id"] for job in client.history(until=middle)] == ids[:3][::-1]


def test_a_plans_name_is_not_its_digest(service: Service) -> None:
    """An empty list would say that nothing ran under it."""
    answer = service.http.get("/v1/jobs", params={"plan": "water"})
    assert answer.status_code == 422
    assert answer.json()["errors"][0]["pointer"] == "/query/plan"
    assert "digest" in answer.json()["errors"][0]["message"]
    digest = post(service)["plan_digest"]
    assert len(service.http.get("/v1/jobs", params={"plan": digest}).json()["items"]) == 1


def test_pages_neither_skip_nor_repeat_while_jobs_come_in(service: Service) -> None:
    old = [post(service)["id"] for _ in range(6)]
    seen, cursor = list[str](), None
    while True:
        page = service.http.get("/v1/jobs", params={"limit": 2} | ({"cursor": cursor} if cursor else {})).json()
        seen += [job["id"] for job in page["items"]]
        cursor = page["next_cursor"]
        if cursor is None:
            break
        post(service)
    assert [one for one in seen if one in old] == old[::-1]
    assert len(set(seen)) == len(seen)


def test_what_the_core_refuses_fails_the_job_with_the_reason(service: Service) -> None:
    """Only the fit shows that these x are too close for a cubic."""
    close = DATASET | {"x": [0, 1e-10, 2e-10, 3e-10, 1, 1, 1, 1]}
    job = post(service, dataset=close, plan={"min_degree": 3})
    service.work()
    with Client(service.address) as client:
        ended = client.wait(job["id"])
        assert ended["state"] == "failed"
        assert ended["error"]["code"] == "invalid_input"
        assert ended["result"] is None
        with pytest.raises(ProblemError, match="no_verdict") as raised:
            client.verdict(job["id"])
    assert raised.value.status == 404


def test_a_full_queue_is_said_and_nothing_is_stored(service: Service) -> None:
    for _ in range(3):
        post(service)
    object.__setattr__(service.settings, "queue_depth", 3)
    answer = service.http.post("/v1/jobs", json={"dataset": DATASET | {"subject": "other"}})
    assert answer.status_code == 503
    assert answer.json()["code"] == "queue_full"
    assert int(answer.headers["retry-after"]) > 0
    assert service.http.get("/v1/datasets", params={"subject": "other"}).json()["items"] == []


def test_a_request_id_of_the_caller_is_kept(service: Service) -> None:
    assert service.http.get("/healthz", headers={"X-Request-Id": "abc-1"}).headers["x-request-id"] == "abc-1"
    assert service.http.get("/healthz", headers={"X-Request-Id": "a b\tc"}).headers["x-request-id"] != "a b\tc"
