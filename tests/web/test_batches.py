"""Many datasets at once: each is taken or refused by itself, and ten thousand are no trouble."""

import json
import os
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from service.settings import Settings
from service.workflows import batches
from tests.web.service import Service, running

NDJSON = {"Content-Type": "application/x-ndjson"}
MEGABYTE = 2**20


def dataset(number: int, points: int = 12) -> dict[str, Any]:
    random = np.random.default_rng(number)
    x = np.linspace(0, 10, points)
    return {"subject": f"PT-{number}", "x": x.tolist(), "y": (1 + 2 * x + random.normal(0, 0.05, points)).tolist()}


BAD: list[tuple[Any, str]] = [
    ({"subject": "B", "x": [1, 2, 3, 4], "y": [1, 2, 3]}, "/dataset/y"),
    ({"subject": "B", "x": [1, 2, "3"], "y": [1, 2, 3]}, "/dataset/x/2"),
    ({"subject": "B", "x": [2, 2, 2, 2], "y": [1, 2, 3, 4]}, "/dataset/x"),
    ({"subject": "B", "x": [1, 2, 3], "y": [1, 2, 3], "colour": "red"}, "/dataset/colour"),
    ("text", "/dataset"),
    (None, "/dataset"),
    ([], "/dataset"),
]
BAD_LINES = [
    b"{",
    b'{"subject": "B", "subject": "C"}',
    b"\xff",
    b"[" * 5000,
    b'{"subject": "B", "x": [1, 2, NaN], "y": [1]}',
]


def results(service: Service, location: str) -> list[dict[str, Any]]:
    answer = service.http.get(f"{location}/results")
    assert answer.headers["content-type"] == "application/x-ndjson"
    return [json.loads(line) for line in answer.text.splitlines()]


def test_bad_datasets_do_not_spoil_the_others(service: Service) -> None:
    posted = [dataset(0), *(one for one, _ in BAD), dataset(1)]
    answer = service.http.post("/v1/batches", json={"datasets": posted, "plan": {"max_degree": 3}})
    assert answer.status_code == 202
    assert (answer.json()["size"], answer.json()["refused"], answer.json()["ended"]) == (len(posted), len(BAD), False)
    assert service.work() == 2
    ended = service.http.get(answer.headers["location"]).json()
    assert ended["ended"]
    assert ended["states"]["succeeded"] == 2
    lines = results(service, answer.headers["location"])
    assert [line["position"] for line in lines] == list(range(len(posted)))
    for line, (_, pointer) in zip(lines[1:-1], BAD, strict=True):
        assert line["job_id"] is None
        assert line["error"]["code"] == "invalid_input"
        assert line["error"]["errors"][0]["pointer"] == pointer
    for line in (lines[0], lines[-1]):
        job = service.http.get(f"/v1/jobs/{line['job_id']}").json()
        assert line["result"] == job["result"]
        assert line["verdict"] == job["verdict"]
        assert job["plan"]["max_degree"] == 3


def test_bad_lines_do_not_spoil_the_others(service: Service) -> None:
    lines = [json.dumps(dataset(0)).encode(), b"", *BAD_LINES, json.dumps(dataset(1)).encode(), b"", b""]
    answer = service.http.post("/v1/batches", content=b"\r\n".join(lines), headers=NDJSON)
    assert answer.status_code == 202
    found = results(service, answer.headers["location"])
    assert [line["job_id"] is not None for line in found] == [True, *[False] * len(BAD_LINES), True]
    assert all(line["error"]["errors"] for line in found[1:-1])


@pytest.mark.parametrize("body", [b"", b"\n\n", b"  \n"])
def test_an_empty_batch_is_refused(service: Service, body: bytes) -> None:
    assert service.http.post("/v1/batches", content=body, headers=NDJSON).status_code == 400
    assert service.http.post("/v1/batches", json={"datasets": []}).status_code == 422


def test_a_batch_sent_again_is_the_same_batch(service: Service) -> None:
    headers = {"Idempotency-Key": "b-1"}
    first, second = (service.http.post("/v1/batches", json={"datasets": [dataset(0)]}, headers=headers) for _ in "12")
    assert first.json()["id"] == second.json()["id"]
    other = service.http.post("/v1/batches", json={"datasets": [dataset(1)]}, headers=headers)
    assert (other.status_code, other.json()["code"]) == (422, "key_reused")
    job = service.http.post("/v1/jobs", json={"dataset": dataset(0)}, headers=headers)
    assert (job.status_code, job.json()["code"]) == (422, "key_reused")


def test_a_full_queue_takes_all_of_a_batch_or_nothing(service: Service) -> None:
    object.__setattr__(service.settings, "queue_depth", 3)
    answer = service.http.post("/v1/batches", json={"datasets": [dataset(i) for i in range(4)]})
    assert (answer.status_code, answer.json()["code"]) == (503, "queue_full")
    assert service.http.get("/v1/batches").json()["items"] == []
    assert service.http.get("/v1/datasets").json()["items"] == []
    assert service.http.post("/v1/batches", json={"datasets": [dataset(i) for i in range(3)]}).status_code == 202


def test_a_batch_sent_again_is_the_same_batch_though_the_queue_is_full(service: Service) -> None:
    object.__setattr__(service.settings, "queue_depth", 2)
    headers = {"Idempotency-Key": "b-2"}
    body = {"datasets": [dataset(i) for i in range(2)]}
    first, second = (service.http.post("/v1/batches", json=body, headers=headers) for _ in "12")
    assert (first.status_code, second.status_code) == (202, 202)
    assert first.json()["id"] == second.json()["id"]
    body["datasets"].append(dataset(2))
    other = service.http.post("/v1/batches", json=body, headers=headers)
    assert (other.status_code, other.json()["code"]) == (422, "key_reused")
    new = service.http.post("/v1/batches", json=body)
    assert (new.status_code, new.json()["code"]) == (503, "queue_full")
    assert "nothing was stored" in new.json()["detail"]
    assert len(service.http.get("/v1/datasets").json()["items"]) == 2


def test_a_queue_that_fills_meanwhile_says_what_was_stored(service: Service, monkeypatch: pytest.MonkeyPatch) -> None:
    """Between the first look and the jobs, others may take the room."""
    object.__setattr__(service.settings, "queue_depth", 1)
    whole = batches._keep_datasets

    def meanwhile(*words: Any) -> list[str]:
        ids = whole(*words)
        assert service.http.post("/v1/jobs", json={"dataset": dataset(7)}).status_code == 202
        return ids

    monkeypatch.setattr(batches, "_keep_datasets", meanwhile)
    late = service.http.post("/v1/batches", json={"datasets": [dataset(0)]})
    assert (late.status_code, late.json()["code"]) == (503, "queue_full")
    assert "the datasets were stored, no job was put in" in late.json()["detail"]
    assert service.http.get("/v1/batches").json()["items"] == []
    assert {one["subject"] for one in service.http.get("/v1/datasets").json()["items"]} == {"PT-0", "PT-7"}


def resident() -> int:
    """Memory of this process (and the service in it), in bytes."""
    return int(Path("/proc/self/statm").read_text().split()[1]) * os.sysconf("SC_PAGE_SIZE")


@pytest.mark.long
def test_ten_thousand_datasets(tmp_path: Path) -> None:
    """Taken, listed and read back whole; memory grows by little more than the body and its numbers."""
    with running(Settings(data_dir=tmp_path)) as service:
        service.http.timeout = httpx.Timeout(280)
        body = b"\n".join(json.dumps(dataset(i, 30)).encode() for i in range(10_000))
        before = resident()
        answer = service.http.post("/v1/batches", content=body, headers=NDJSON)
        assert answer.status_code == 202
        assert answer.json()["states"]["queued"] == 10_000
        assert resident() - before < 300 * MEGABYTE
        before = resident()
        with service.http.stream("GET", f"{answer.headers['location']}/results") as stream:
            positions = [json.loads(line)["position"] for line in stream.iter_lines()]
        assert positions == list(range(10_000))
        assert resident() - before < 50 * MEGABYTE
        one_more = service.http.post("/v1/batches", content=body + b"\n{}", headers=NDJSON)
        assert (one_more.status_code, one_more.json()["code"]) == (413, "too_large")
