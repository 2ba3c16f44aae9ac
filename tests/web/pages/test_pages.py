"""Pages without a browser: states, filters, paging, and nothing that the Content-Security-Policy would refuse."""

from typing import Any

import pytest

from service.errors import InvalidInput, Overloaded
from service.store import jobs as store
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
