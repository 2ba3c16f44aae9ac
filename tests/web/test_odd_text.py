"""Text that PostgreSQL cannot hold, or that is no text: refused by name on both engines, never a 500."""

from typing import Any

import pytest

from tests.web.service import Service

GOOD: dict[str, Any] = {"subject": "A", "x": [1, 2, 3, 4, 5], "y": [1, 2, 3, 4, 5.1]}
ODD = ("a%00b", "%00", "%ff", "%ed%a0%80", "%f4%90%80%80", "%c0%80", "'", "%25", "%27%20OR%201=1", "a" * 300)


@pytest.fixture
def paths(service_on_either: Service) -> list[str]:
    document = service_on_either.http.get("/openapi.json").json()
    return [path for path, item in document["paths"].items() if "get" in item]


def test_ids_in_paths(service_on_either: Service, paths: list[str]) -> None:
    for path in (one for one in paths if "{" in one):
        for odd in ODD:
            filled = path.replace("{name}", "curve")
            filled = filled[: filled.index("{")] + odd + filled[filled.index("}") + 1 :]
            answer = service_on_either.http.get(filled)
            assert answer.status_code in (404, 422), (filled, answer.text)
            assert answer.headers["content-type"] == "application/problem+json"


def test_pages(service_on_either: Service) -> None:
    for path in ("/history", "/jobs", "/subjects", "/batches", "/plans", "/datasets"):
        for odd in ODD:
            assert service_on_either.http.get(f"{path}/{odd}").status_code in (200, 404, 422), (path, odd)
            assert service_on_either.http.get(f"{path}?subject={odd}").status_code in (200, 404, 422), (path, odd)


def test_queries(service_on_either: Service, paths: list[str]) -> None:
    names = ("subject", "submitted_by", "plan", "name", "cursor", "state", "since")
    for path in (one for one in paths if "{" not in one and one.startswith("/v1")):
        for name in names:
            for odd in ODD:
                answer = service_on_either.http.get(f"{path}?{name}={odd}")
                assert answer.status_code in (200, 422), (path, name, odd, answer.text)


def test_bodies(service_on_either: Service) -> None:
    for text in ("a\x00b", "\x00", "a\x1fb", "\x7f"):
        for change in (
            {"subject": text},
            {"title": text},
            {"x_unit": text},
            {"tags": {"a": text}},
            {"tags": {text: "a"}},
        ):
            answer = service_on_either.http.post("/v1/datasets", json=GOOD | change)
            assert answer.status_code == 422, change
        for body in (
            {"dataset_id": text},
            {"dataset": GOOD, "plan_id": text},
            {"dataset": GOOD, "subject": text},
            {"dataset": GOOD | {"series": [text] * 5}},
        ):
            assert service_on_either.http.post("/v1/jobs", json=body).status_code == 422, body
        assert service_on_either.http.post("/v1/plans", json={"name": text, "plan": {}}).status_code == 422
    for text in ("ß", "漢字", "🜨", "e\u0301", "\u202e", "\u2028", "\ufeff", "' OR 1=1 --", "<script>"):
        answer = service_on_either.http.post("/v1/datasets", json=GOOD | {"subject": text, "title": text})
        assert answer.status_code == 201, text
        assert answer.json()["subject"] == text
        assert len(service_on_either.http.get("/v1/datasets", params={"subject": text}).json()["items"]) == 1
