"""Pages without a browser: states, filters, paging, and nothing that the Content-Security-Policy would refuse."""

from datetime import UTC, datetime, timedelta
from typing import Any

import pytest
from sqlalchemy import func, select, update

from service.errors import InvalidInput, Overloaded
from service.store import jobs as store
from service.store.tables import jobs
from service.workflows.retention import purge
from tests.history import crowd
from tests.web.examples import BOWED, DATASET, PLAN
from tests.web.pages.reading import Refused
from tests.web.service import Service

HOSTILE = "<script>alert(1)</script>'\"&<b>"


def put(service: Service, dataset: dict[str, Any] = BOWED, **more: Any) -> str:
    return str(service.http.post("/v1/jobs", json={"dataset": dataset, **more}).json()["id"])


def every_page(service: Service) -> list[str]:
    """Addresses of one of each page, with jobs in every state behind them."""
    done = put(service, {**DATASET, "subject": HOSTILE, "title": HOSTILE}, plan=PLAN)
    batch = service.http.post("/v1/batches", json={"datasets": [BOWED, {"subject": "bad", "x": [1]}]}).json()["id"]
    plan = service.http.post("/v1/plans", json={"name": HOSTILE, "plan": PLAN}).json()["id"]
    service.work()
    cancelled, queued = put(service), put(service)
    service.http.delete(f"/v1/jobs/{cancelled}").raise_for_status()
    return [
        "/history",
        "/history?subject=none+such",
        "/history?state=wrong",
        f"/job/{done}",
        f"/job/{done}/report",
        f"/job/{cancelled}",
        f"/job/{queued}",
        "/job/none-such",
        "/subject?name=%3Cscript%3Ealert(1)%3C/script%3E'%22%26%3Cb%3E",
        "/subject?name=none",
        "/queue",
        "/batches",
        f"/batch/{batch}",
        "/plans",
        f"/plan/{plan}",
        "/try",
        "/sign-in",
    ]


def test_every_page_is_whole_and_strict(service: Service):
    for address in every_page(service):
        page = service.http.get(address)
        assert page.status_code in (200, 404, 422), address
        assert page.headers["content-type"] == "text/html; charset=utf-8"
        policy = page.headers["content-security-policy"]
        assert "script-src 'self'" in policy
        assert "unsafe" not in policy
        assert Refused(page.text).found == [], address
        assert "<script>alert" not in page.text
        assert page.text.count("<h1") == 1, address
        assert '<html lang="en">' in page.text
        for caution in ("does not replace", "Never extrapolate", "Where people can be hurt"):
            assert caution in page.text


def test_empty_states_say_what_to_do(service: Service):
    assert "No jobs yet" in service.http.get("/history").text
    assert "No batches yet" in service.http.get("/batches").text
    assert "No named plans yet" in service.http.get("/plans").text
    assert "Nothing waits and nothing runs" in service.http.get("/queue").text
    put(service)
    filtered = service.http.get("/history", params={"subject": "another"}).text
    assert "No job matches" in filtered
    assert "Show every job" in filtered


def test_a_job_that_waits_says_so_and_can_be_called_off(service: Service):
    job = put(service)
    page = service.http.get(f"/job/{job}")
    assert "Waits for a worker" in page.text
    assert "Cancel this job" in page.text
    assert service.http.get(f"/job/{job}/state").json() == {"state": "queued", "progress": None, "ended": False}
    service.work()
    assert service.http.get(f"/job/{job}/state").json()["ended"] is True
    assert "Cancel this job" not in service.http.get(f"/job/{job}").text


def test_a_long_run_says_how_long_and_how_far(service: Service):
    job = put(service)
    now = datetime.now(UTC)
    running = {
        "state": "running",
        "token": "t",
        "worker": "bench:7",
        "lease_until": now + timedelta(hours=1),
        "started_at": now - timedelta(minutes=3),
        "attempts": 2,
        "stage": "cross_validate",
        "stage_done": 40,
        "stage_of": 100,
    }
    with service.database.write() as connection:
        connection.execute(update(jobs).where(jobs.c.id == job).values(running))
    page = service.http.get(f"/job/{job}").text
    assert "It has run for 3 min 0 s, and is stopped after 10 min 0 s." in page
    assert '<progress max="100" value="40"' in page
    assert "cross-validates" in page
    assert "attempt 2" in page
    assert "bench:7" in service.http.get("/queue").text
    assert service.http.get(f"/job/{job}/state").json()["progress"] == {
        "stage": "cross_validate",
        "done": 40,
        "of": 100,
    }


def test_ten_thousand_jobs_that_wait(service: Service):
    crowd(service.database, 10_000, analyse=False)
    with service.database.write() as connection:
        busy = (jobs.c.state == "succeeded") & (jobs.c.submitted_by == "line 1")
        connection.execute(update(jobs).where(busy).values(state="queued", verdict=None, chosen_degree=None))
        waiting = connection.execute(select(func.count()).where(jobs.c.state == "queued")).scalar_one()
    page = service.http.get("/queue").text
    assert f'<dd id="waiting">{waiting}</dd>' in page
    assert "line 1" in page
    assert len(page) < 20_000
    history = service.http.get("/history?state=queued").text
    assert history.count('<a id="job-') == 50
    assert len(history) < 60_000


def test_a_result_that_retention_removed(service: Service):
    job = put(service, DATASET, plan=PLAN)
    service.work()
    service.http.get(f"/v1/jobs/{job}/figures/curve.svg").raise_for_status()
    later = datetime.now(UTC) + timedelta(days=1)
    assert purge(service.database, before=later, now=later, dry_run=False).jobs == 1
    page = service.http.get(f"/job/{job}")
    assert page.status_code == 200
    assert "The chosen degree can be defended" in page.text
    assert "The result was removed" in page.text
    assert "removed by retention" in page.text
    assert service.http.get(f"/v1/jobs/{job}/verdict").headers["etag"][1:-1] in page.text
    assert "The result was removed" in service.http.get(f"/job/{job}/report").text
    for address in (f"/v1/jobs/{job}/report.pdf", f"/v1/jobs/{job}/figures/curve.svg"):
        answer = service.http.get(address)
        assert (answer.status_code, answer.json()["code"]) == (404, "no_result")
    assert service.http.get("/subject", params={"name": DATASET["subject"]}).status_code == 200


def test_a_failed_job_shows_its_error(service: Service, monkeypatch: pytest.MonkeyPatch):
    job = put(service)

    def refused(*_: Any, **__: Any) -> None:
        raise InvalidInput.at("/dataset/x", "lies too close together")

    monkeypatch.setattr("service.workflows.run.analyse", refused)
    service.work()
    page = service.http.get(f"/job/{job}").text
    assert "Ended with an error" in page
    assert "<code>/dataset/x</code> lies too close together" in page
    assert "The dataset and the plan are kept" in page


def test_verdict_comes_first_in_words(service: Service):
    job = put(service, DATASET, plan=PLAN)
    service.work()
    page = service.http.get(f"/job/{job}").text
    order = [page.index(part) for part in ("The chosen degree can be defended", "What to do", "Figures", "Candidates")]
    assert order == sorted(order)
    verdict = service.http.get(f"/v1/jobs/{job}/verdict")
    assert verdict.headers["etag"][1:-1] in page
    for name in ("curve", "degrees", "residuals", "normal", "spread", "leverage", "unseen"):
        image = service.http.get(f"/job/{job}/figures/{name}.svg")
        assert image.content == service.http.get(f"/v1/jobs/{job}/figures/{name}.svg").content


def test_paging_neither_skips_nor_repeats(service: Service):
    ids = {put(service) for _ in range(110)}
    seen: list[str] = []
    address: str | None = "/history"
    while address:
        page = service.http.get(address).text
        seen += [part.split('"')[0] for part in page.split('<a id="job-')[1:]]
        put(service)  # others come meanwhile
        more = page.partition('rel="next"')[0].rpartition('href="')[2]
        address = more.split('"')[0].replace("&amp;", "&") if 'rel="next"' in page else None
    assert len(seen) == len(set(seen))
    assert ids <= set(seen)


def test_filters_are_those_of_the_api(service: Service):
    put(service)
    put(service, DATASET)
    service.work()
    put(service)
    for query in (
        {"subject": BOWED["subject"]},
        {"state": "queued"},
        {"verdict": "adequate"},
        {"submitted_by": "local"},
        {"submitted_by": "nobody"},
        {"since": "2020-01-01"},
        {"until": "2020-01-01"},
        {"since": "2020-01-01T10:00", "until": "2999-01-01", "state": "succeeded"},
    ):
        page = service.http.get("/history", params=query).text
        asked = {
            k: f"{v if 'T' in v else v + 'T00:00'}:00Z" if k in ("since", "until") else v for k, v in query.items()
        }
        listed = service.http.get("/v1/jobs", params=asked).json()["items"]
        assert [part.split('"')[0] for part in page.split('<a id="job-')[1:]] == [job["id"] for job in listed], query
    for wrong in ({"state": "odd"}, {"verdict": "odd"}, {"since": "yesterday"}, {"cursor": "?"}):
        assert service.http.get("/history", params=wrong).status_code == 422


def test_a_subject_s_verdicts_over_time(service: Service):
    bent = {**BOWED, "y": [y + 0.02 * (i % 3) for i, y in enumerate(BOWED["y"])]}
    for dataset in (BOWED, bent, BOWED):
        put(service, dataset, subject="gauge 1")
        service.work()
    page = service.http.get("/subject", params={"name": "gauge 1"}).text
    degrees = [job["chosen_degree"] for job in service.http.get("/v1/jobs?subject=gauge+1").json()["items"]]
    assert page.count('<li><a class="mark') == 3
    changes = sum(new != old for new, old in zip(degrees, degrees[1:], strict=False))
    assert page.count("from the one before") >= changes > 0


def test_a_database_that_is_away_is_said_so(service: Service, monkeypatch: pytest.MonkeyPatch):
    def away(*_: Any, **__: Any) -> None:
        raise Overloaded("the database cannot be reached", retry_after=5, code="database_away")

    monkeypatch.setattr(store, "newest", away)
    page = service.http.get("/history")
    assert page.status_code == 503
    assert page.headers["retry-after"] == "5"
    assert "Nothing is lost" in page.text
