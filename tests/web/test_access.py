"""Who may do what: every operation of the document, called without a key, with bad ones, and in each role.

A table; an operation that is in the document and not in the table fails the test.
"""

import json
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
import pytest

from service.settings import Settings
from service.workflows.callers import Role, create_key, revoke_key
from tests.web.examples import paths_of
from tests.web.service import Service, running

NOW = datetime(2026, 5, 4, tzinfo=UTC)
DATASET = {"subject": "PT-1", "x": [0, 1, 2, 3, 4, 5, 6, 7], "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02]}
ANOTHER = DATASET | {"subject": "PT-2"}
UNKNOWN = "01a00000-0000-7000-8000-000000000000"
PEOPLE: dict[str, Role] = {"owner": "submit", "other": "submit", "reader": "read", "admin": "admin"}


@dataclass(frozen=True)
class Case:
    """One call, and the status that owner, another team, a reader and an administrator get."""

    owner: int
    other: int
    reader: int
    admin: int
    path: dict[str, str] = field(default_factory=dict)
    body: Any = None
    needs_key: bool = True

    @property
    def statuses(self) -> dict[str, int]:
        return {name: getattr(self, name) for name in PEOPLE}


JOB, DATA, BATCH, PLAN = {"job_id": "job"}, {"dataset_id": "dataset"}, {"batch_id": "batch"}, {"plan_id": "plan"}
FIGURE = JOB | {"name": "=curve"}
# fmt: off
TABLE = {
    "post_dataset": Case(201, 201, 403, 200, body=ANOTHER),  # the same content: new to the other team all the same
    "list_datasets": Case(200, 200, 200, 200),
    "get_dataset": Case(200, 404, 200, 200, DATA),
    "post_job": Case(202, 202, 403, 202, body={"dataset": ANOTHER}),
    "list_jobs": Case(200, 200, 200, 200),
    "get_job": Case(200, 404, 200, 200, JOB),
    "cancel_job": Case(409, 404, 403, 409, JOB),  # it has ended
    "get_verdict": Case(200, 404, 200, 200, JOB),
    "list_verdicts": Case(200, 200, 200, 200),
    "get_job_events": Case(200, 404, 200, 200, JOB),
    "get_figure_svg": Case(200, 404, 200, 200, FIGURE),
    "get_figure_png": Case(200, 404, 200, 200, FIGURE),
    "get_report": Case(200, 404, 200, 200, JOB),
    "post_batch": Case(202, 202, 403, 202, body={"datasets": [ANOTHER]}),
    "list_batches": Case(200, 200, 200, 200),
    "get_batch": Case(200, 404, 200, 200, BATCH),
    "get_batch_results": Case(200, 404, 200, 200, BATCH),
    "post_plan": Case(200, 200, 403, 200, body={"name": "plan", "plan": {}}),  # plans are shared
    "list_plans": Case(200, 200, 200, 200),
    "get_plan": Case(200, 200, 200, 200, PLAN),
    "get_health": Case(200, 200, 200, 200, needs_key=False),
    "get_readiness": Case(200, 200, 200, 200, needs_key=False),
    "get_metrics": Case(403, 403, 200, 200),
}
# fmt: on


@dataclass(frozen=True)
class World:
    """A service with keys, and what the owner has put in."""

    service: Service
    keys: dict[str, str]
    ids: dict[str, str]
    paths: dict[str, tuple[str, str]]

    def call(self, operation: str, header: str | None, ids: dict[str, str] | None = None) -> httpx.Response:
        case, (method, path) = TABLE[operation], self.paths[operation]
        known = self.ids if ids is None else ids
        filled = {name: value[1:] if value[0] == "=" else known[value] for name, value in case.path.items()}
        headers = httpx.Headers({} if header is None else {"Authorization": header}, encoding="latin-1")
        return self.service.http.request(method, path.format(**filled), json=case.body, headers=headers)

    def as_(self, name: str) -> dict[str, str]:
        return {"Authorization": f"Bearer {self.keys[name]}"}


@pytest.fixture(scope="module")
def world(tmp_path_factory: pytest.TempPathFactory) -> Iterator[World]:
    with running(Settings(data_dir=tmp_path_factory.mktemp("access"))) as service:
        keys = {name: create_key(service.database, name=name, role=role, now=NOW)[0] for name, role in PEOPLE.items()}
        keys["revoked"], _ = create_key(service.database, name="revoked", role="admin", now=NOW)
        revoke_key(service.database, name="revoked", now=NOW)
        made = {}
        owner = {"Authorization": f"Bearer {keys['owner']}"}
        for name, path, body in (
            ("dataset", "/v1/datasets", DATASET),
            ("plan", "/v1/plans", {"name": "plan", "plan": {}}),
            ("job", "/v1/jobs", {"dataset": DATASET}),
            ("batch", "/v1/batches", {"datasets": [DATASET]}),
        ):
            answer = service.http.post(path, json=body, headers=owner)
            assert answer.is_success, answer.text
            made[name] = answer.json()["id"]
        service.work()
        yield World(service, keys, made, paths_of(service))


def test_every_operation_is_in_the_table(world: World) -> None:
    assert set(TABLE) == set(world.paths)


@pytest.mark.parametrize("operation", TABLE)
def test_each_role_gets_what_it_may(world: World, operation: str) -> None:
    found = {name: world.call(operation, f"Bearer {world.keys[name]}").status_code for name in PEOPLE}
    assert found == TABLE[operation].statuses


def headers_of(keys: dict[str, str]) -> dict[str, str | None]:
    """Everything that is no key in force."""
    good = keys["admin"]
    return {
        "none": None,
        "wrong": "Bearer lbk_" + "A" * 43,
        "revoked": f"Bearer {keys['revoked']}",
        "cut": f"Bearer {good[:-1]}",
        "longer": f"Bearer {good}A",
        "other case": f"Bearer {good.swapcase()}",
        "two": f"Bearer {good} {good}",
        "another scheme": f"Basic {good}",
        "no scheme": good,
        "empty": "",
        "scheme alone": "Bearer",
        "very long": "Bearer " + "A" * 30_000,
        "injection": "Bearer ' OR 1=1 --",
        "latin": "Bearer \xe9\xe8",
        "null": "Bearer null",
    }


@pytest.mark.parametrize("operation", TABLE)
def test_without_a_key_in_force_nothing_but_health_answers(world: World, operation: str) -> None:
    for name, header in headers_of(world.keys).items():
        answer = world.call(operation, header)
        if not TABLE[operation].needs_key:
            assert answer.status_code == 200
            continue
        assert answer.status_code == 401, name
        assert answer.headers["content-type"] == "application/problem+json"
        assert answer.headers["www-authenticate"].startswith("Bearer")
        assert answer.json()["code"] == "unauthenticated"


def test_a_revoked_key_is_answered_as_one_that_never_was(world: World) -> None:
    revoked, wrong = (world.call("list_jobs", header) for header in (f"Bearer {world.keys['revoked']}", "Bearer x"))
    assert without_request_id(revoked) == without_request_id(wrong)


OF_SOMEBODY = [name for name, case in TABLE.items() if case.other == 404]


@pytest.mark.parametrize("operation", OF_SOMEBODY)
def test_what_belongs_to_another_team_looks_like_nothing(world: World, operation: str) -> None:
    """No difference in status, headers or body tells an id that exists from one that does not."""
    header = f"Bearer {world.keys['other']}"
    theirs = without_request_id(world.call(operation, header))
    nothing = without_request_id(world.call(operation, header, dict.fromkeys(world.ids, UNKNOWN)))
    for real in world.ids.values():
        theirs = theirs.replace(real, UNKNOWN)
    assert theirs == nothing


def without_request_id(answer: httpx.Response) -> str:
    body = answer.json()
    body.pop("request_id")
    headers = {k: v for k, v in answer.headers.items() if k not in ("x-request-id", "date")}
    return json.dumps([answer.status_code, headers, body])


def test_lists_hold_only_what_a_submitter_may_see(world: World) -> None:
    """Before the other team has put in anything of its own."""
    key, _ = create_key(world.service.database, name="newcomer", role="submit", now=NOW)
    newcomer = {"Authorization": f"Bearer {key}"}
    for path in ("/v1/datasets", "/v1/jobs", "/v1/verdicts", "/v1/batches", "/v1/jobs?submitted_by=owner"):
        assert world.service.http.get(path, headers=newcomer).json()["items"] == [], path
        assert world.service.http.get(path, headers=world.as_("reader")).json()["items"] != [], path
    posted = world.service.http.post("/v1/jobs", json={"dataset_id": world.ids["dataset"]}, headers=newcomer)
    unknown = world.service.http.post("/v1/jobs", json={"dataset_id": UNKNOWN}, headers=newcomer)
    assert posted.status_code == unknown.status_code == 422
    assert posted.text.replace(world.ids["dataset"], UNKNOWN)[:200] == unknown.text[:200]


def test_a_job_says_who_submitted_it(world: World) -> None:
    job = world.service.http.get(f"/v1/jobs/{world.ids['job']}", headers=world.as_("admin")).json()
    assert job["submitted_by"] == "owner"
    assert job["result"]["provenance"]["submitted_by"] == "owner"


def test_a_key_is_not_kept(world: World) -> None:
    everything = b"".join(path.read_bytes() for path in Path(world.service.settings.data_dir).iterdir())
    for key in world.keys.values():
        assert key.encode() not in everything
        assert key.removeprefix("lbk_").encode() not in everything


def test_an_idempotency_key_is_its_submitters_own(world: World) -> None:
    """Another team's key value neither collides nor answers their job."""
    headers = {"Idempotency-Key": "shared-word"}
    ids = {
        world.service.http.post("/v1/jobs", json={"dataset": DATASET}, headers=headers | world.as_(name)).json()["id"]
        for name in ("owner", "other", "owner")
    }
    assert len(ids) == 2


def test_once_keys_were_made_revoking_all_of_them_opens_nothing(tmp_path: Path) -> None:
    with running(Settings(data_dir=tmp_path)) as service:
        assert service.http.get("/v1/jobs").status_code == 200
        create_key(service.database, name="only", role="admin", now=NOW)
        assert service.http.get("/v1/jobs").status_code == 401
        revoke_key(service.database, name="only", now=NOW)
        assert service.http.get("/v1/jobs").status_code == 401


def test_too_many_requests_of_one_key(tmp_path: Path) -> None:
    with running(Settings(data_dir=tmp_path, requests_per_minute=5)) as service:
        keys = [create_key(service.database, name=name, role="read", now=NOW)[0] for name in ("a", "b")]
        first, second = ({"Authorization": f"Bearer {key}"} for key in keys)
        statuses = [service.http.get("/v1/jobs", headers=first).status_code for _ in range(7)]
        assert statuses == [200] * 5 + [429] * 2
        refused = service.http.get("/v1/jobs", headers=first)
        assert refused.json()["code"] == "rate_limited"
        assert 0 < int(refused.headers["retry-after"]) <= 60
        assert service.http.get("/v1/jobs", headers=second).status_code == 200
        assert service.http.get("/healthz", headers=first).status_code == 200
