"""What administrators rely on: logs, metrics, readiness, a reference that needs no internet, a graceful stop."""

import contextlib
import re
import shutil
import signal
import threading
import time
from pathlib import Path
from typing import Any

import httpx
import pytest
from prometheus_client.parser import text_string_to_metric_families

from service.client import Client
from service.settings import Settings
from service.store.tables import State, jobs
from service.web import metrics as module
from tests.web.real import make_key, real_service
from tests.web.service import Service, running

DATASET: dict[str, Any] = {
    "subject": "PT-1",
    "x": [0, 1, 2, 3, 4, 5, 6, 7],
    "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02],
}
SLOW = {"resampling": {"folds": 50, "repeats": 400}}
LONG = {"subject": "PT-2", "x": [float(i) for i in range(400)], "y": [i + 0.1 * (-1) ** i for i in range(400)]}


def metrics(service: Service) -> dict[tuple[str, frozenset[tuple[str, str]]], float]:
    text = service.http.get("/metrics").text
    return {
        (sample.name, frozenset(sample.labels.items())): sample.value
        for family in text_string_to_metric_families(text)
        for sample in family.samples
    }


def value(found: dict[Any, float], name: str, **labels: str) -> float:
    return found.get((name, frozenset(labels.items())), 0.0)


def test_metrics_count_what_happened(service: Service) -> None:
    for i in range(3):
        assert service.http.post("/v1/jobs", json={"dataset": DATASET, "subject": f"PT-{i}"}).status_code == 202
    assert service.http.get("/v1/jobs/none").status_code == 404
    assert service.http.get("/v1/jobs/also-none").status_code == 404
    assert service.http.head("/v1/jobs").status_code == 200
    time.sleep(0.05)
    waiting = metrics(service)
    assert value(waiting, "leastbend_jobs", state="queued") == 3
    assert value(waiting, "leastbend_jobs", state="running") == 0
    assert value(waiting, "leastbend_oldest_queued_seconds") >= 0.05
    assert value(waiting, "leastbend_requests_total", operation="post_job", status="202") == 3
    assert value(waiting, "leastbend_requests_total", operation="get_job", status="404") == 2
    assert value(waiting, "leastbend_requests_total", operation="list_jobs", status="200") == 1
    assert value(waiting, "leastbend_request_seconds_count", operation="post_job") == 3
    assert service.work() == 3
    after = metrics(service)
    assert value(after, "leastbend_jobs", state="queued") == 0
    assert value(after, "leastbend_oldest_queued_seconds") == 0
    assert value(after, "leastbend_verdicts_total", verdict="adequate") == 3
    for stage in ("waiting", "running"):
        assert value(after, "leastbend_job_seconds_count", stage=stage) == 3
        assert value(after, "leastbend_job_seconds_sum", stage=stage) > 0
    assert metrics(service) is not None
    assert value(metrics(service), "leastbend_verdicts_total", verdict="adequate") == 3  # not counted twice


def test_what_ended_before_the_process_began_is_not_counted(tmp_path: Path) -> None:
    settings = Settings(data_dir=tmp_path)
    for _ in "12":
        with running(settings) as service:
            service.http.post("/v1/jobs", json={"dataset": DATASET})
            assert service.work() == 1
            assert value(metrics(service), "leastbend_verdicts_total", verdict="adequate") == 1


def test_two_who_ask_at_once_count_a_job_once(service: Service, monkeypatch: pytest.MonkeyPatch) -> None:
    service.http.post("/v1/jobs", json={"dataset": DATASET})
    assert service.work() == 1
    both = threading.Barrier(2)
    whole = module.ended_since

    def together(*words: Any) -> Any:
        found = whole(*words)
        with contextlib.suppress(threading.BrokenBarrierError):
            both.wait(timeout=0.5)  # the other has read the same, unless it may not yet
        return found

    monkeypatch.setattr(module, "ended_since", together)
    threads = [threading.Thread(target=service.http.get, args=("/metrics",)) for _ in "12"]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert value(metrics(service), "leastbend_verdicts_total", verdict="adequate") == 1


def test_metrics_hold_no_path_that_a_caller_made_up(service: Service) -> None:
    for i in range(50):
        service.http.get(f"/made/up/{i}")
        service.http.get(f"/v1/jobs/{i}")
        service.http.request("BREW", "/v1/jobs")
    text = service.http.get("/metrics").text
    assert "made" not in text
    operations = set(re.findall(r'leastbend_requests_total\{operation="(\w+)"', text))
    assert operations <= {"none", "get_job", "get_metrics", "list_jobs", "post_job"}


def test_readiness_looks_at_database_and_queue(service: Service) -> None:
    ready = service.http.get("/readyz")
    assert (ready.status_code, ready.json()["status"]) == (200, "ready")
    with service.database.write() as connection:
        connection.exec_driver_sql("UPDATE alembic_version SET version_num = 'older'")
    refused = service.http.get("/readyz")
    assert (refused.status_code, refused.json()["code"]) == (503, "not_migrated")
    assert int(refused.headers["retry-after"]) > 0
    assert service.http.get("/healthz").status_code == 200


@pytest.mark.long
def test_logs_are_json_with_request_and_job_ids_and_no_secret(tmp_path: Path) -> None:
    key = make_key(tmp_path, "bench", "submit")
    with real_service(tmp_path) as real, httpx.Client(base_url=real.address, timeout=60) as http:
        headers = {"Authorization": f"Bearer {key}", "X-Request-Id": "mine-1", "Prefer": "wait=30"}
        job = http.post("/v1/jobs", json={"dataset": DATASET}, headers=headers)
        assert job.status_code == 200
        http.get(f"/v1/jobs/{job.json()['id']}", headers={"Authorization": f"Bearer {key}"})
        http.get("/v1/jobs?subject=secret-subject", headers={"Authorization": "Bearer lbk_wrong-key"})
        answers = real.answers()
        text = (tmp_path / "log").read_text()
    posted = next(line for line in answers if line["request_id"] == "mine-1")
    assert posted["job_id"] == job.json()["id"]
    assert (posted["method"], posted["path"], posted["status"]) == ("POST", "/v1/jobs", 200)
    assert posted["caller"] == "bench"
    assert posted["seconds"] >= 0
    assert {"at", "level", "pid", "logger"} <= posted.keys()
    read = next(line for line in answers if line["method"] == "GET" and line["path"].startswith("/v1/jobs/"))
    assert read["job_id"] == job.json()["id"]
    for secret in (key, "lbk_wrong-key", "secret-subject"):
        assert secret not in text


@pytest.mark.long
def test_a_stop_finishes_what_runs(tmp_path: Path) -> None:
    """SIGTERM while a job runs: whoever waits is answered, the job finishes or goes back to the queue, exit is 0."""
    answers = list[httpx.Response]()
    with real_service(tmp_path, "--workers", "1") as real, httpx.Client(base_url=real.address, timeout=120) as http:
        body = {"dataset": LONG, "plan": SLOW}
        thread = threading.Thread(
            target=lambda: answers.append(http.post("/v1/jobs", json=body, headers={"Prefer": "wait=60"}))
        )
        thread.start()
        with Client(real.address) as client:
            until = time.monotonic() + 60
            while not any(job["state"] == "running" for job in client.history()) and time.monotonic() < until:
                time.sleep(0.02)
        real.process.send_signal(signal.SIGTERM)
        thread.join()
        assert real.process.wait(60) == 0
    assert answers[0].status_code in (200, 202)
    with running(Settings(data_dir=tmp_path)) as service:
        job = service.http.get(f"/v1/jobs/{answers[0].json()['id']}").json()
        assert job["state"] == "succeeded"
        assert job["attempts"] == 1
        with service.database.read() as connection:
            left = connection.execute(jobs.select().where(jobs.c.state == State.RUNNING)).all()
        assert left == []


@pytest.mark.long
def test_the_reference_works_in_a_browser_with_no_internet(service: Service) -> None:
    """Under the security headers: every operation is listed, nothing is asked of another host, nothing is blocked."""
    sync_api = pytest.importorskip("playwright.sync_api")
    chromium = shutil.which("chromium")
    if chromium is None:
        pytest.skip("chromium is not installed")
    operations = [one for item in service.http.get("/openapi.json").json()["paths"].values() for one in item.values()]
    asked, said = list[str](), list[str]()
    with sync_api.sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=chromium, args=["--no-sandbox", "--disable-gpu"])
        page = browser.new_page()
        page.on("request", lambda request: asked.append(request.url))
        page.on("console", lambda message: said.append(message.text) if message.type == "error" else None)
        page.on("pageerror", lambda error: said.append(str(error)))
        page.goto(f"{service.address}/docs", timeout=60_000)
        page.wait_for_selector(".opblock", timeout=60_000)
        shown = page.locator(".opblock").count()
        # And it is more than a picture: it sends a request and shows the answer.
        block = page.locator("#operations-operations-get_health")
        block.locator("button.opblock-summary-control").click()
        block.get_by_role("button", name="Try it out").click()
        block.get_by_role("button", name="Execute").click()
        page.wait_for_selector("#operations-operations-get_health .live-responses-table", timeout=60_000)
        answered = block.locator(".live-responses-table").inner_text()
        browser.close()
    assert shown == len(operations)
    assert '"ok"' in answered
    assert said == []
    assert {url for url in asked if not url.startswith((service.address, "data:", "blob:"))} == set()
