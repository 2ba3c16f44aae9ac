"""Bad input: 400, 413, 415 or 422 as a problem that names the field; never a 500."""

from typing import Any

import pytest
from pydantic import ValidationError

from service.core.plan import Plan
from service.errors import InvalidInput, MalformedInput
from service.web.schemas.datasets import DatasetBody
from service.web.schemas.jobs import JobBody
from service.web.schemas.plans import PlanBody
from service.web.strict_json import parse_json, read_value
from tests.web.service import Service

GOOD: dict[str, Any] = {"subject": "A", "x": [1, 2, 3, 4, 5], "y": [1, 2, 3, 4, 5.1]}


def dataset(**changes: Any) -> dict[str, Any]:
    return GOOD | changes


DATASETS = [
    (dataset(y=[1, 2, 3, 4]), "/y"),
    (dataset(u_y=[1, 1, 1]), "/u_y"),
    (dataset(series=["a", "b", "c"]), "/series"),
    (dataset(x=[1, 2], y=[1, 2]), "/x"),
    (dataset(x=[1, 2, "3", 4, 5]), "/x/2"),
    (dataset(x=[1, 2, None, 4, 5]), "/x/2"),
    (dataset(x=[1, 2, True, 4, 5]), "/x/2"),
    (dataset(x=[1, 2, [3], 4, 5]), "/x/2"),
    (dataset(x="1,2,3"), "/x"),
    (dataset(x={"0": 1}), "/x"),
    (dataset(x=[1, 2, 1e308, 4, 5]), "/x/2"),
    (dataset(y=[1, 2, 1e-200, 4, 5]), "/y/2"),
    (dataset(u_y=[1, 1, 0, 1, 1]), "/u_y/2"),
    (dataset(u_y=[1, 1, -1, 1, 1]), "/u_y/2"),
    (dataset(subject=""), "/subject"),
    (dataset(subject=3), "/subject"),
    (dataset(subject="  "), "/subject"),
    (dataset(subject="\u00a0\u3000"), "/subject"),
    (dataset(series=["a", "a", " ", "b", "b"]), "/series/2"),
    (dataset(tags={" ": "a"}), "/tags/ "),
    (dataset(subject="a\x00b"), "/subject"),
    (dataset(level_tolerance=-1), "/level_tolerance"),
    (dataset(measured_at="yesterday"), "/measured_at"),
    (dataset(measured_at="2026-05-04T09:30:00"), "/measured_at"),
    (dataset(measured_at=1777887000), "/measured_at"),
    (dataset(measured_at="9999-12-31T23:59:59-14:00"), "/measured_at"),
    (dataset(tags={"a": 1}), "/tags/a"),
    (dataset(colour="red"), "/colour"),
    ({"x": [1, 2, 3], "y": [1, 2, 3]}, "/subject"),
    ([], ""),
    ("text", ""),
]
JOBS = [
    ({}, ""),
    ({"dataset": GOOD, "dataset_id": "x"}, ""),
    ({"dataset_id": "01a00000-0000-7000-8000-000000000000"}, "/dataset_id"),
    ({"dataset": dataset(y=[1, 2, 3])}, "/dataset/y"),
    ({"dataset": dataset(x=[2, 2, 2, 2, 2])}, "/dataset/x"),
    ({"dataset": dataset(x=[1, 1, 1, 2, 2]), "plan": {"min_degree": 2}}, "/dataset/x"),
    ({"dataset": GOOD, "plan": {"max_degre": 3}}, "/plan/max_degre"),
    ({"dataset": GOOD, "plan": {"max_degree": 13}}, "/plan/max_degree"),
    ({"dataset": GOOD, "plan": {"min_degree": 4, "max_degree": 3}}, "/plan/max_degree"),
    ({"dataset": GOOD, "plan": {"max_degree": "3"}}, "/plan/max_degree"),
    ({"dataset": GOOD, "plan": {"max_degree": 3.5}}, "/plan/max_degree"),
    ({"dataset": GOOD, "plan": {"weights": "1/y"}}, "/plan/weights"),
    ({"dataset": GOOD, "plan": {"weights": "u_y"}}, "/plan/weights"),
    ({"dataset": dataset(x=[0, 1, 2, 3, 4]), "plan": {"weights": "1/x"}}, "/dataset/x/0"),
    ({"dataset": GOOD, "plan": {"rule": "best"}}, "/plan/rule"),
    ({"dataset": GOOD, "plan": {"resampling": {"folds": 1}}}, "/plan/resampling/folds"),
    ({"dataset": GOOD, "plan": {"resampling": {"scheme": "leave_series_out"}}}, "/plan/resampling/scheme"),
    ({"dataset": GOOD, "plan": {"working_range": [2, 1]}}, "/plan/working_range"),
    ({"dataset": GOOD, "plan": {"working_range": [7, 9]}}, "/plan/working_range"),
    ({"dataset": GOOD, "plan": {"working_range": [1]}}, "/plan/working_range"),
    ({"dataset": GOOD, "plan": {"confidence": 1}}, "/plan/confidence"),
    ({"dataset": GOOD, "plan": {"known_uncertainty": True}}, "/plan/known_uncertainty"),
    ({"dataset": GOOD, "plan": {"requirements": {"min_r2": 2}}}, "/plan/requirements/min_r2"),
    (
        {"dataset": GOOD, "plan": {"requirements": {"max_permissible_error": {"value": 0}}}},
        "/plan/requirements/max_permissible_error/value",
    ),
    (
        {
            "dataset": GOOD,
            "plan": {"requirements": {"back_calculated": {"limit_percent": 5, "limit_percent_lowest": 2}}},
        },
        "/plan/requirements/back_calculated/limit_percent_lowest",
    ),
    ({"dataset": dataset(u_x=[1, 1, 1, 1, 1])}, "/dataset/u_x"),
    ({"dataset": GOOD, "priority": 1000}, "/priority"),
    ({"dataset": GOOD, "subject": ""}, "/subject"),
    ({"dataset": GOOD, "subject": " "}, "/subject"),
    ({"dataset": GOOD, "notify_url": "not a url"}, "/notify_url"),
]
RAW = [
    (b"", 400),
    (b"  ", 400),
    (b"{", 400),
    (b"{'a': 1}", 400),
    (b'{"subject": "A", "subject": "B", "x": [1, 2, 3], "y": [1, 2, 3]}', 400),
    (b"[" * 200_000, 400),
    (b'{"subject": "\xff", "x": [1, 2, 3], "y": [1, 2, 3]}', 400),
    (b'{"subject": "A", "x": [1, 2, NaN], "y": [1, 2, 3]}', 422),
    (b'{"subject": "A", "x": [1, 2, -Infinity], "y": [1, 2, 3]}', 422),
    (b'{"subject": "A", "x": [1, 2, 1e400], "y": [1, 2, 3]}', 422),
    (b'{"subject": "A", "x": [1, 2, 1' + b"0" * 400 + b'], "y": [1, 2, 3]}', 422),
    (b'{"subject": "A", "x": [1, 2, 1' + b"0" * 5000 + b'], "y": [1, 2, 3]}', 400),
    (b'{"subject": "\\ud800", "x": [1, 2, 3], "y": [1, 2, 3]}', 422),
]
QUERIES = [
    ("/v1/jobs?limit=0", "/query/limit"),
    ("/v1/jobs?limit=x", "/query/limit"),
    ("/v1/jobs?state=done", "/query/state"),
    ("/v1/jobs?verdict=good", "/query/verdict"),
    ("/v1/jobs?since=yesterday", "/query/since"),
    ("/v1/jobs?cursor=%2F%2F", "/query/cursor"),
    ("/v1/jobs?subject=%00", "/query/subject"),
    ("/v1/datasets?limit=1000", "/query/limit"),
]


def refused(answer: Any, statuses: tuple[int, ...]) -> dict[str, Any]:
    problem: dict[str, Any] = answer.json()
    assert answer.status_code in statuses, problem
    assert answer.headers["content-type"] == "application/problem+json"
    assert problem["status"] == answer.status_code
    assert problem["request_id"] == answer.headers["x-request-id"]
    return problem


@pytest.mark.parametrize(("path", "cases"), [("/v1/datasets", DATASETS), ("/v1/jobs", JOBS)])
def test_a_bad_body_names_the_field(service: Service, path: str, cases: list[tuple[Any, str]]) -> None:
    for body, pointer in cases:
        problem = refused(service.http.post(path, json=body), (422,))
        assert pointer in [one["pointer"] for one in problem["errors"]], (body, problem)
        assert all(one["message"] for one in problem["errors"])
    assert service.http.get("/v1/datasets").json()["items"] == []
    assert service.http.get("/v1/jobs").json()["items"] == []


def test_a_body_that_cannot_be_read(service: Service) -> None:
    for body, status in RAW:
        answer = service.http.post("/v1/datasets", content=body, headers={"Content-Type": "application/json"})
        refused(answer, (status,))


def test_a_bad_query_names_the_parameter(service: Service) -> None:
    for path, pointer in QUERIES:
        problem = refused(service.http.get(path), (422,))
        assert [one["pointer"] for one in problem["errors"]] == [pointer]


@pytest.mark.parametrize("kind", [None, "text/plain", "application/xml", "application/x-www-form-urlencoded"])
def test_another_type_of_body_is_refused(service: Service, kind: str | None) -> None:
    headers = {} if kind is None else {"Content-Type": kind}
    problem = refused(service.http.post("/v1/jobs", content=b'{"dataset_id": "x"}', headers=headers), (415,))
    assert problem["code"] == "unsupported_media_type"


def test_too_large_a_body_is_refused_while_it_is_read(service: Service) -> None:
    def parts() -> Any:
        for _ in range(40):
            yield b" " * 2**20

    answer = service.http.post("/v1/datasets", content=parts(), headers={"Content-Type": "application/json"})
    assert refused(answer, (413,))["code"] == "too_large"


def test_unknown_paths_and_methods_are_problems(service: Service) -> None:
    assert refused(service.http.get("/v2/jobs"), (404,))["code"] == "not_found"
    assert refused(service.http.put("/v1/jobs", json={}), (405,))["code"] == "method_not_allowed"


def test_the_plan_as_posted_has_the_defaults_of_the_core() -> None:
    assert PlanBody().plan("/plan") == Plan()
    assert PlanBody.model_validate({}).model_dump() == PlanBody().model_dump()


@pytest.mark.parametrize(
    ("value", "pointer", "message"),
    [
        ({"dataset": GOOD, "subject": " "}, "/subject", "must hold a visible character, and no control characters"),
        ({"dataset": GOOD | {"title": "a\x01"}}, "/dataset/title", "must not hold control characters"),
        (
            {"dataset": GOOD, "notify_url": "not a url"},
            "/notify_url",
            "must be an address without spaces, in printable",
        ),
    ],
)
def test_a_pattern_is_told_in_words(value: Any, pointer: str, message: str) -> None:
    with pytest.raises(InvalidInput) as raised:
        read_value(JobBody, value)
    ((found, words),) = [(one.pointer, one.message) for one in raised.value.errors]
    assert found == pointer
    assert words.startswith(message)


def test_names_may_hold_spaces_and_any_script(service: Service) -> None:
    for subject in ("a b", " a ", "\u6e29\u5ea6\u8a08 1", "\u00b0"):
        assert service.http.post("/v1/datasets", json=dataset(subject=subject)).status_code == 201


def errors_of(value: Any) -> tuple[list[tuple[str, str]], int]:
    """What is told of a dataset, and how many errors were collected for it."""
    with pytest.raises(InvalidInput) as raised:
        read_value(DatasetBody, value)
    collected = raised.value.__cause__
    assert isinstance(collected, ValidationError)
    return [(one.pointer, one.message) for one in raised.value.errors], collected.error_count()


def test_no_more_errors_are_collected_than_are_told() -> None:
    """Half a million of them took 421 MB."""
    many = 200_000
    found, collected = errors_of(dataset(x=[1, 2] + [""] * many, y=[0.5] + [None] * many, series=["a", ""] * many))
    assert found == [
        ("/x/2", "must be a number"),
        ("/y/1", "must be a number"),
        ("/series/1", "string should have at least 1 character"),
    ]
    assert collected == len(found)
    found, collected = errors_of({f"k{i}": i for i in range(many)} | GOOD | {"y": 1})
    assert found == [("/y", "must be a list"), *((f"/k{i}", "is not a known key") for i in range(19))]
    assert collected == 21
    found, collected = errors_of(dataset(tags={f"k{i}": i for i in range(many)}))
    assert (found, collected) == ([("/tags", f"holds {many} tags; at most 50 are taken")], 1)


def test_a_key_that_stands_twice_among_very_many_is_named() -> None:
    pairs = ", ".join(f'"k{i}": {i}' for i in range(200_000))
    with pytest.raises(MalformedInput, match="the key 'k199999' stands twice"):
        parse_json(f'{{{pairs}, "k199999": 0, "k1": 0}}'.encode())
