"""The scenario of openapi_examples/: what is sent, in which order, and how answers are compared.

python -m tests.web.examples writes the files anew from the answers of a running service.
"""

import json
import re
import shutil
import sys
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import httpx

from service.settings import Settings
from service.store.migrate import resources
from tests.web.service import Service, running

FOLDER = resources("openapi_examples")
ID = re.compile(r"[0-9a-f]{8}-[0-9a-f]{4}-7[0-9a-f]{3}-[0-9a-f]{4}-[0-9a-f]{12}")
TIME = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d+)?(Z|\+00:00)")
DIGEST = re.compile(r'"?[0-9a-f]{64}"?')
HEADERS = ("location", "retry-after", "preference-applied", "etag", "content-type")
OF_THIS_MACHINE = {"versions", "blas", "platform", "worker", "service_version", "queue_messages"}
FREE_DIGESTS = {"result_digest", "previous", "etag"}  # follow from the last digits of floats, and from each other

DATASET = {
    "subject": "SM-PT-07",
    "title": "Pressure transmitter of the sluice (invented)",
    "x_quantity": "pressure",
    "x_unit": "kPa",
    "y_quantity": "current",
    "y_unit": "mA",
    "x": [0, 100, 200, 300, 400, 500, 500, 400, 300, 200, 100, 0],
    "y": [4.001, 7.204, 10.399, 13.602, 16.798, 20.003, 20.001, 16.801, 13.599, 10.402, 7.198, 3.999],
    "series": ["up"] * 6 + ["down"] * 6,
    "measured_at": "2026-05-04T09:30:00Z",
    "tags": {"site": "Saltmere tidal works (invented)"},
}
PLAN = {"requirements": {"max_permissible_error": {"value": 0.1, "of": "x", "kind": "percent_of_span"}}}
BOWED = {
    "subject": "SM-LC-11",
    "x": [5, 10, 15, 20, 25, 30, 35, 40, 45, 50],
    "y": [0.2006, 0.4008, 0.6009, 0.8008, 1.0006, 1.2003, 1.3997, 1.5991, 1.7983, 1.9973],
}


@dataclass(frozen=True, kw_only=True)
class Step:
    """One example. `work`: what waits is run before; `live`: a worker runs meanwhile. `{...}` names an earlier id."""

    operation: str
    case: str
    summary: str
    path: dict[str, str] = field(default_factory=dict)
    query: dict[str, Any] = field(default_factory=dict)
    headers: dict[str, str] = field(default_factory=dict)
    type: str | None = None
    body: Any = None
    work: bool = False
    live: bool = False


# fmt: off
STEPS = (
    Step(operation="get_health", case="up", summary="The process answers"),
    Step(operation="get_readiness", case="ready", summary="Database and queue answer"),
    Step(operation="post_dataset", case="stored", summary="A pressure transmitter, up and down", body=DATASET),
    Step(operation="post_dataset", case="again", summary="The same content again", body=DATASET),
    Step(operation="post_dataset", case="lengths_differ", summary="One reading is missing",
         body={"subject": "SM-PT-07", "x": [0, 100, 200, 300], "y": [4.001, 7.204, 10.399]}),
    Step(operation="get_dataset", case="with_points", summary="With its numbers",
         path={"dataset_id": "{post_dataset/stored}"}, query={"include": "points"}),
    Step(operation="get_dataset", case="unknown", summary="No such dataset",
         path={"dataset_id": "01a00000-0000-7000-8000-000000000000"}),
    Step(operation="list_datasets", case="of_subject", summary="Datasets of one subject",
         query={"subject": "SM-PT-07"}),
    Step(operation="post_job", case="queued", summary="A stored dataset under a plan",
         body={"dataset_id": "{post_dataset/stored}", "plan": PLAN}),
    Step(operation="get_job", case="waiting", summary="Not yet run", path={"job_id": "{post_job/queued}"}),
    Step(operation="get_verdict", case="not_ready", summary="Not yet run", path={"job_id": "{post_job/queued}"}),
    Step(operation="get_job", case="done", summary="With its result", path={"job_id": "{post_job/queued}"}, work=True),
    Step(operation="get_verdict", case="adequate", summary="An adequate calibration",
         path={"job_id": "{post_job/queued}"}),
    Step(operation="get_figure_svg", case="curve", summary="Points and curve",
         path={"job_id": "{post_job/queued}", "name": "curve"}),
    Step(operation="get_figure_png", case="degrees", summary="Cross-validation error of each degree",
         path={"job_id": "{post_job/queued}", "name": "degrees"}),
    Step(operation="get_report", case="two_pages", summary="The report of a job",
         path={"job_id": "{post_job/queued}"}),
    Step(operation="post_job", case="waited_for", summary="Dataset inline, answered when the job has ended",
         headers={"Prefer": "wait=30"}, body={"dataset": BOWED}, live=True),
    Step(operation="post_job", case="unknown_key", summary="The plan has a key that is not known",
         body={"dataset": BOWED, "plan": {"max_degre": 4}}),
    Step(operation="get_job", case="unknown", summary="No such job",
         path={"job_id": "01a00000-0000-7000-8000-000000000000"}),
    Step(operation="list_jobs", case="succeeded", summary="Jobs that succeeded, the first page",
         query={"state": "succeeded", "limit": 1}),
    Step(operation="post_dataset", case="as_csv", summary="As a table, with a semicolon",
         query={"subject": "SM-LC-11", "x_unit": "kN", "y_unit": "mV/V"}, type="text/csv",
         body="x;y\n5;0.2006\n10;0.4008\n15;0.6009\n20;0.8008\n25;1.0006\n"),
    Step(operation="post_dataset", case="as_csv_wrong", summary="A table with a decimal comma",
         query={"subject": "SM-LC-11"}, type="text/csv", body="x;y\n5;0,2006\n10;0,4008\n15;0,6009\n"),
    Step(operation="post_plan", case="stored", summary="A plan under a name",
         body={"name": "pressure transmitters", "plan": PLAN}),
    Step(operation="post_plan", case="again", summary="The same plan again",
         body={"name": "pressure transmitters", "plan": PLAN}),
    Step(operation="get_plan", case="found", summary="One version", path={"plan_id": "{post_plan/stored}"}),
    Step(operation="list_plans", case="newest", summary="The newest version of each name",
         query={"newest_only": "true"}),
    Step(operation="post_job", case="under_named_plan", summary="Under a named plan, safe to repeat",
         headers={"Idempotency-Key": "\"b5a1c9e0-07\""},
         body={"dataset_id": "{post_dataset/stored}", "plan_id": "{post_plan/stored}"}),
    Step(operation="post_job", case="repeated", summary="The same again: the same job",
         headers={"Idempotency-Key": "\"b5a1c9e0-07\""},
         body={"dataset_id": "{post_dataset/stored}", "plan_id": "{post_plan/stored}"}),
    Step(operation="post_job", case="key_reused", summary="The same key for another body",
         headers={"Idempotency-Key": "\"b5a1c9e0-07\""}, body={"dataset_id": "{post_dataset/stored}"}),
    Step(operation="cancel_job", case="waiting", summary="Cancelled before it ran",
         path={"job_id": "{post_job/under_named_plan}"}),
    Step(operation="cancel_job", case="ended", summary="It has ended", path={"job_id": "{post_job/queued}"}),
    Step(operation="post_batch", case="three", summary="Three datasets, one of them bad",
         body={"datasets": [DATASET, BOWED, {"subject": "SM-XX-00", "x": [1, 2, 3, 4], "y": [1, 2, 3]}], "plan": PLAN}),
    Step(operation="post_batch", case="as_ndjson", summary="A dataset a line",
         query={"plan_id": "{post_plan/stored}"}, type="application/x-ndjson",
         body="\n".join(json.dumps(one) for one in (DATASET, BOWED))),
    Step(operation="get_batch", case="ended", summary="All of its jobs have ended",
         path={"batch_id": "{post_batch/three}"}, work=True),
    Step(operation="get_batch_results", case="three", summary="An item a line",
         path={"batch_id": "{post_batch/three}"}),
    Step(operation="list_batches", case="page", summary="Batches, newest first", query={"limit": 1}),
    Step(operation="list_verdicts", case="newest", summary="The newest verdict of each subject",
         query={"newest_only": "true"}),
    Step(operation="get_job_events", case="ended", summary="What happened to a job that has ended",
         path={"job_id": "{post_job/queued}"}),
    Step(operation="get_metrics", case="now", summary="Prometheus metrics"),
)
# fmt: on


class Ids:
    """Ids of the recorded run against those of this one."""

    def __init__(self) -> None:
        self.actual: dict[str, str] = {}

    def pair(self, recorded: str, actual: str) -> bool:
        """Whether the two stand for the same thing."""
        return self.actual.setdefault(recorded, actual) == actual

    def translated(self, value: Any) -> Any:
        """`value` with recorded ids replaced by this run's."""
        text = json.dumps(value)
        return json.loads(ID.sub(lambda found: self.actual.get(found[0], found[0]), text))


def send(
    service: Service, operation: str, request: dict[str, Any], paths: dict[str, tuple[str, str]]
) -> httpx.Response:
    """Send one request as a file holds it."""
    method, path = paths[operation]
    headers = dict(request.get("headers", {}))
    content = None
    if "body" in request:
        headers["Content-Type"] = request.get("type", "application/json")
        body = request["body"]
        content = (body if isinstance(body, str) else json.dumps(body)).encode()
    return service.http.request(
        method,
        path.format(**request.get("path", {})),
        params=request.get("query"),
        headers=headers,
        content=content,
    )


def answer_of(summary: str, response: httpx.Response) -> dict[str, Any]:
    """The answer as a file holds it."""
    answer: dict[str, Any] = {"summary": summary, "status": response.status_code}
    answer["headers"] = {name: response.headers[name] for name in HEADERS if name in response.headers}
    kind = response.headers.get("content-type", "").split(";")[0]
    if kind.startswith("image/") or kind == "application/pdf":  # tests/web/figures and pages look at what is in them
        answer["type"] = kind
    elif response.content:
        answer["type"] = kind
        answer["body"] = _body(kind, response.text)
    return answer


def _body(kind: str, text: str) -> Any:
    if kind == "application/x-ndjson":
        return [json.loads(line) for line in text.splitlines()]
    if kind == "text/event-stream":  # each event as the fields that a caller's library gives it
        events = [dict(line.split(": ", 1) for line in event.splitlines()) for event in text.strip().split("\n\n")]
        return [event | {"data": json.loads(event["data"])} for event in events]
    if kind == "text/plain":  # the names alone: the numbers are of the moment
        return sorted({line.split("{")[0].split(" ")[0] for line in text.splitlines() if not line.startswith("#")})
    return json.loads(text)


def paths_of(service: Service) -> dict[str, tuple[str, str]]:
    """Method and path of every operation, from the document itself."""
    document = service.http.get("/openapi.json").json()
    return {
        operation["operationId"]: (method.upper(), path)
        for path, item in document["paths"].items()
        for method, operation in item.items()
        if method in ("get", "post", "put", "patch", "delete")
    }


def differences(expected: Any, actual: Any, ids: Ids, at: str = "") -> Iterator[str]:
    """Where the answer is not the recorded one, apart from ids, times and what belongs to the machine."""
    name = at.rsplit("/", 1)[-1]
    if name in OF_THIS_MACHINE:
        return
    if isinstance(expected, dict) and isinstance(actual, dict):
        if expected.keys() != actual.keys():
            yield f"{at}: keys {sorted(expected)} and {sorted(actual)}"
        for key in expected.keys() & actual.keys():
            yield from differences(expected[key], actual[key], ids, f"{at}/{key}")
    elif isinstance(expected, list) and isinstance(actual, list):
        if len(expected) != len(actual):
            yield f"{at}: {len(expected)} and {len(actual)} items"
        for i, (one, other) in enumerate(zip(expected, actual, strict=False)):
            yield from differences(one, other, ids, f"{at}/{i}")
    elif not _same(name, expected, actual, ids):
        yield f"{at}: {expected!r} and {actual!r}"


def _same(name: str, expected: Any, actual: Any, ids: Ids) -> bool:
    if isinstance(expected, str) and isinstance(actual, str):
        if name == "request_id" or (name == "next_cursor" and actual):
            return True
        if TIME.fullmatch(expected) and TIME.fullmatch(actual):
            return True
        if name in FREE_DIGESTS and DIGEST.fullmatch(expected) and DIGEST.fullmatch(actual):
            return True
        found, other = ID.findall(expected), ID.findall(actual)
        paired = len(found) == len(other) and all(ids.pair(a, b) for a, b in zip(found, other, strict=True))
        return paired and ID.sub("", expected) == ID.sub("", actual)
    numbers = (int, float)
    if isinstance(expected, numbers) and isinstance(actual, numbers) and not isinstance(expected, bool):
        return abs(expected - actual) <= 1e-6 * max(abs(expected), abs(actual)) + 1e-9
    return type(expected) is type(actual) and expected == actual


def record() -> None:
    """Write every file anew."""
    with tempfile.TemporaryDirectory() as directory, running(Settings(data_dir=Path(directory))) as service:
        shutil.rmtree(FOLDER, ignore_errors=True)
        paths, ids = paths_of(service), dict[str, str]()
        for number, step in enumerate(STEPS):
            request: dict[str, Any] = {"summary": step.summary, "order": number, "work": step.work, "live": step.live}
            for part in ("path", "query", "headers", "type", "body"):
                value = getattr(step, part)
                if value not in (None, {}):
                    request[part] = json.loads(re.sub(r"\{(\w+/\w+)\}", lambda m: ids[m[1]], json.dumps(value)))
            answer = run(service, step.operation, request, paths)
            recorded = answer_of(step.summary, answer)
            if isinstance(recorded.get("body"), dict) and "id" in recorded["body"]:
                ids[f"{step.operation}/{step.case}"] = recorded["body"]["id"]
            for kind, value in (("request", request), ("response", recorded)):
                path = FOLDER / step.operation / f"{step.case}.{kind}.json"
                path.parent.mkdir(parents=True, exist_ok=True)
                path.write_text(json.dumps(value, indent=2, ensure_ascii=False) + "\n", "utf-8")
            sys.stdout.write(f"{step.operation} {step.case} {answer.status_code}\n")


def run(service: Service, operation: str, request: dict[str, Any], paths: dict[str, tuple[str, str]]) -> httpx.Response:
    """Send one request in the circumstances its file asks for."""
    if request["work"]:
        service.work()
    if request["live"]:
        with service.working():
            return send(service, operation, request, paths)
    return send(service, operation, request, paths)


if __name__ == "__main__":
    record()
