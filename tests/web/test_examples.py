"""Every file of openapi_examples/ is sent to a running service, and its answer is the recorded one."""

from typing import Any

from service.web.openapi import examples_by_operation
from tests.web.examples import Ids, answer_of, differences, paths_of, run
from tests.web.service import Service


def in_order() -> list[tuple[str, str, dict[str, Any]]]:
    """Operation, case and files, in the order they were recorded in: later ones name ids of earlier ones."""
    found = [(op, case, files) for op, cases in examples_by_operation().items() for case, files in cases.items()]
    return sorted(found, key=lambda one: int(one[2]["request"]["order"]))


def test_every_example_is_answered_as_recorded(service: Service) -> None:
    paths, ids, wrong = paths_of(service), Ids(), list[str]()
    for operation, case, files in in_order():
        answer = run(service, operation, ids.translated(files["request"]), paths)
        actual = answer_of(files["response"]["summary"], answer)
        wrong += [f"{operation}/{case}{one}" for one in differences(files["response"], actual, ids)]
    assert wrong == []


def test_every_operation_has_an_example(service: Service) -> None:
    assert set(paths_of(service)) == set(examples_by_operation())


def test_examples_stand_in_the_document(service: Service) -> None:
    document = service.http.get("/openapi.json").json()
    posting = document["paths"]["/v1/jobs"]["post"]
    body = examples_by_operation()["post_job"]["queued"]["request"]["body"]
    assert posting["requestBody"]["content"]["application/json"]["examples"]["queued"]["value"] == body
    assert "unknown_key" in posting["responses"]["422"]["content"]["application/problem+json"]["examples"]


def test_a_wrong_number_would_be_seen() -> None:
    assert list(differences({"a": [1.0, 2.0]}, {"a": [1.0, 2.001]}, Ids())) == ["/a/1: 2.0 and 2.001"]
    assert list(differences({"a": None}, {"a": 0}, Ids())) == ["/a: None and 0"]
