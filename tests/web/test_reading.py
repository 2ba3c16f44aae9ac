"""Reading back: conditional requests, pages and polling that neither skip nor repeat, immutable plans."""

import threading
from datetime import timedelta
from typing import Any

import pytest

from service.workflows.retention import purge
from tests.web.service import Service

DATASET: dict[str, Any] = {
    "subject": "PT-1",
    "x": [0, 1, 2, 3, 4, 5, 6, 7],
    "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02],
}


def post(service: Service, subject: str = "PT-1") -> str:
    answer = service.http.post("/v1/jobs", json={"dataset": DATASET, "subject": subject})
    assert answer.status_code == 202
    return str(answer.json()["id"])


def test_what_the_caller_has_is_not_sent_again(service: Service) -> None:
    dataset = service.http.post("/v1/datasets", json=DATASET).json()["id"]
    plan = service.http.post("/v1/plans", json={"name": "p", "plan": {}}).json()["id"]
    job = post(service)
    service.work()
    for path in (
        f"/v1/datasets/{dataset}",
        f"/v1/datasets/{dataset}?include=points",
        f"/v1/plans/{plan}",
        f"/v1/jobs/{job}",
        f"/v1/jobs/{job}/verdict",
        "/openapi.json",
    ):
        whole = service.http.get(path)
        tag = whole.headers["etag"]
        assert tag.startswith('"')
        for asked in (tag, f"W/{tag}", f'"other", {tag}', "*"):
            answer = service.http.get(path, headers={"If-None-Match": asked})
            assert (answer.status_code, answer.content, answer.headers["etag"]) == (304, b"", tag), (path, asked)
        for asked in ('"other"', tag.strip('"'), "", ","):
            answer = service.http.get(path, headers={"If-None-Match": asked})
            assert (answer.status_code, answer.content) == (200, whole.content), (path, asked)
    tags = {service.http.get(f"/v1/datasets/{dataset}{query}").headers["etag"] for query in ("", "?include=points")}
    assert len(tags) == 2


def test_a_datasets_tag_changes_with_its_document(service: Service) -> None:
    """It says when it was stored, which is another time after its points were removed and posted again."""
    path = "/v1/datasets/" + service.http.post("/v1/datasets", json=DATASET).json()["id"]
    first = {query: service.http.get(path + query) for query in ("", "?include=points")}
    later = service.context.now() + timedelta(seconds=1)
    assert purge(service.database, before=later, now=later, dry_run=False).datasets == 1
    gone = service.http.get(path, params={"include": "points"})
    assert (gone.status_code, gone.json()["code"]) == (409, "dataset_purged")
    job = service.http.post("/v1/jobs", json={"dataset_id": path.split("/")[-1]})
    assert (job.status_code, job.json()["code"]) == (409, "dataset_purged")
    assert service.http.post("/v1/datasets", json=DATASET).status_code == 200
    for query, old in first.items():
        new = service.http.get(path + query, headers={"If-None-Match": old.headers["etag"]})
        assert new.status_code == 200
        assert new.json()["created_at"] > old.json()["created_at"]
        assert new.headers["etag"] != old.headers["etag"]


def test_what_retention_causes_stands_in_the_document(service: Service) -> None:
    job = post(service)
    service.work()
    later = service.context.now() + timedelta(seconds=1)
    assert purge(service.database, before=later, now=later, dry_run=False).jobs == 1
    stream = service.http.get(f"/v1/jobs/{job}/events")
    events = [line.removeprefix("event: ") for line in stream.text.splitlines() if line.startswith("event: ")]
    assert events == ["purged"]
    paths = service.http.get("/openapi.json").json()["paths"]
    streamed = paths["/v1/jobs/{job_id}/events"]["get"]["responses"]["200"]["content"]["text/event-stream"]["schema"]
    assert "purged" in streamed["properties"]["event"]["enum"]
    for path, method in (("/v1/datasets/{dataset_id}", "get"), ("/v1/jobs", "post"), ("/v1/batches", "post")):
        assert "409" in paths[path][method]["responses"]
        assert "dataset_purged" in paths[path][method]["description"]


def test_a_jobs_tag_changes_with_it(service: Service) -> None:
    job = post(service)
    waiting = service.http.get(f"/v1/jobs/{job}").headers["etag"]
    assert service.http.get(f"/v1/jobs/{job}", headers={"If-None-Match": waiting}).status_code == 304
    service.work()
    done = service.http.get(f"/v1/jobs/{job}", headers={"If-None-Match": waiting})
    assert (done.status_code, done.json()["state"]) == (200, "succeeded")


def poll(service: Service, cursor: str | None, **filters: Any) -> tuple[list[str], str | None]:
    """Everything new since, page by page as a QA system asks."""
    seen = list[str]()
    while True:
        query = {"limit": 3, **filters} | ({} if cursor is None else {"cursor": cursor})
        page = service.http.get("/v1/verdicts", params=query).json()
        cursor = page["next_cursor"]
        if not page["items"]:
            return seen, cursor
        seen += [one["job_id"] for one in page["items"]]


def test_polling_sees_each_verdict_once_in_order(service_on_either: Service) -> None:
    """While verdicts are issued: nothing twice, nothing left out, and the order is that of issue."""
    service = service_on_either
    assert poll(service, None) == ([], None)
    ids = [post(service, f"PT-{i}") for i in range(40)]
    seen, cursor = list[str](), None
    with service.working():
        while len(seen) < len(ids):
            new, cursor = poll(service, cursor)
            seen += new
    assert sorted(seen) == sorted(ids)
    chain = service.http.get("/v1/verdicts", params={"limit": 100}).json()["items"]
    assert [one["job_id"] for one in chain] == seen
    assert poll(service, cursor) == ([], cursor)


def test_newest_verdict_of_each_subject(service_on_either: Service) -> None:
    service = service_on_either
    old, new, other = post(service, "A"), post(service, "A"), post(service, "B")
    service.work()
    assert set(poll(service, None, newest_only=True)[0]) == {new, other}
    assert set(poll(service, None, subject="A")[0]) == {old, new}
    again = post(service, "A")
    service.work()
    assert set(poll(service, None, newest_only=True)[0]) == {again, other}


@pytest.mark.parametrize("path", ["/v1/jobs", "/v1/datasets", "/v1/batches", "/v1/plans"])
def test_pages_hold_everything_once(service: Service, path: str) -> None:
    bodies: dict[str, Any] = {
        "/v1/jobs": lambda i: {"dataset": DATASET, "subject": f"S{i}"},
        "/v1/datasets": lambda i: DATASET | {"subject": f"S{i}"},
        "/v1/batches": lambda i: {"datasets": [DATASET | {"subject": f"S{i}"}]},
        "/v1/plans": lambda i: {"name": f"p{i % 3}", "plan": {"max_degree": 2 + i // 3}},
    }
    made = [service.http.post(path, json=bodies[path](i)).json()["id"] for i in range(7)]
    for limit in (1, 2, 3, 7, 8):
        seen, cursor = list[str](), None
        while True:
            page = service.http.get(path, params={"limit": limit} | ({"cursor": cursor} if cursor else {})).json()
            seen += [one["id"] for one in page["items"]]
            cursor = page["next_cursor"]
            if cursor is None:
                break
        assert seen == made[::-1]


def test_a_version_of_a_plan_never_changes(service_on_either: Service) -> None:
    service = service_on_either

    def store(**plan: Any) -> Any:
        return service.http.post("/v1/plans", json={"name": "pressure", "plan": plan})

    first = store(max_degree=3)
    assert (first.status_code, first.json()["version"]) == (201, 1)
    again = store(max_degree=3.0, min_degree=1)  # the same once its defaults are written out
    assert (again.status_code, again.json()["id"]) == (200, first.json()["id"])
    second = store(max_degree=4)
    assert (second.status_code, second.json()["version"]) == (201, 2)
    back = store(max_degree=3)
    assert (back.status_code, back.json()["version"]) == (201, 3)
    assert service.http.get(first.headers["location"]).json() == first.json()
    newest = service.http.get("/v1/plans", params={"newest_only": True, "name": "pressure"}).json()["items"]
    assert [one["version"] for one in newest] == [3]
    job = service.http.post("/v1/jobs", json={"dataset": DATASET, "plan_id": second.json()["id"]}).json()
    assert job["plan"]["max_degree"] == 4
    for method in ("PUT", "PATCH", "DELETE"):
        assert service.http.request(method, first.headers["location"]).status_code == 405


def test_versions_posted_at_once_are_numbered_without_gap_or_double(service_on_either: Service) -> None:
    service = service_on_either
    answers = list[Any]()

    def store(i: int) -> None:
        body = {"name": "p", "plan": {"resampling": {"seed": i}}}
        answers.append(service.http.post("/v1/plans", json=body))

    threads = [threading.Thread(target=store, args=(i,)) for i in range(20)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert [one.status_code for one in answers] == [201] * 20
    assert sorted(one.json()["version"] for one in answers) == list(range(1, 21))
