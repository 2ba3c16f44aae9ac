"""A small client of the HTTP service: submit, wait, fetch the verdict, go through the history.

    with Client("http://127.0.0.1:8080") as client:
        job = client.submit({"subject": "PT-03", "x": [...], "y": [...]})
        job = client.wait(job["id"])
        print(client.verdict(job["id"])["verdict"])

Bodies and answers are the JSON of the HTTP contract as dicts. A call that can be repeated safely is repeated when the
service is away or says to come back later.
"""

import time
import uuid
from collections.abc import Callable, Iterator, Mapping
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from types import TracebackType
from typing import Any, Self

import httpx

ENDED = ("succeeded", "failed", "cancelled")
TRIES = 6
LONGEST_PAUSE = 5.0
Json = dict[str, Any]


class ProblemError(Exception):
    """The service refused: an RFC 9457 problem. `errors` names fields by RFC 6901 pointer."""

    def __init__(self, status: int, body: Json) -> None:
        super().__init__(f"{status} {body.get('code')}: {body.get('detail')}")
        self.status = status
        self.code: str = body.get("code", "")
        self.errors: list[Json] = body.get("errors") or []
        self.request_id: str | None = body.get("request_id")


class Client:
    """One installation of the service. `key` is sent as a bearer token; `timeout` (seconds) is of one HTTP exchange."""

    def __init__(
        self,
        base_url: str,
        *,
        key: str | None = None,
        timeout: float = 30.0,
        transport: httpx.BaseTransport | None = None,
    ) -> None:
        headers = {} if key is None else {"Authorization": f"Bearer {key}"}
        self._timeout = timeout
        self._http = httpx.Client(base_url=base_url, headers=headers, timeout=timeout, transport=transport)

    def post_dataset(self, dataset: Mapping[str, Any]) -> Json:
        """Store a dataset; the same content again answers the same id."""
        return self._json("POST", "/v1/datasets", json=dict(dataset))

    def submit(
        self,
        dataset: Mapping[str, Any] | str,
        plan: Mapping[str, Any] | None = None,
        *,
        idempotency_key: str | None = None,
        wait: float | None = None,
        **options: Any,
    ) -> Json:
        """Queue a job on a dataset, given itself or by id, and answer it.

        `wait`: let the service answer only when the job has ended, or after so many seconds. `options`: subject,
        priority, plan_id, notify_url. The job is made once however often the call had to be repeated.
        """
        body: Json = {
            **({"dataset_id": dataset} if isinstance(dataset, str) else {"dataset": dict(dataset)}),
            **options,
        }
        if plan is not None:
            body["plan"] = dict(plan)
        headers = {"Idempotency-Key": idempotency_key or str(uuid.uuid4())}
        if wait is not None:
            headers["Prefer"] = f"wait={wait:.0f}"
        return self._json("POST", "/v1/jobs", json=body, headers=headers, timeout=self._timeout + (wait or 0))

    def job(self, job_id: str) -> Json:
        """One job, with its result once it has ended."""
        return self._json("GET", f"/v1/jobs/{job_id}")

    def wait(
        self,
        job_id: str,
        *,
        seconds: float = 600.0,
        progress: Callable[[Json], None] | None = None,
    ) -> Json:
        """The job once it has ended. `progress` gets the job each time it was looked at. Raises TimeoutError."""
        until, pause = time.monotonic() + seconds, 0.02
        while True:
            job = self.job(job_id)
            if progress is not None:
                progress(job)
            if job["state"] in ENDED:
                return job
            if time.monotonic() + pause > until:
                raise TimeoutError(f"job {job_id} is {job['state']} after {seconds:g} s")
            time.sleep(pause)
            pause = min(pause * 1.5, 1.0)

    def verdict(self, job_id: str) -> Json:
        """The verdict of a job that succeeded."""
        return self._json("GET", f"/v1/jobs/{job_id}/verdict")

    def history(self, **filters: Any) -> Iterator[Json]:
        """Every job that matches, newest first, page by page. Filters as of GET /v1/jobs."""
        cursor = None
        while True:
            page = self._json("GET", "/v1/jobs", params=filters | ({} if cursor is None else {"cursor": cursor}))
            yield from page["items"]
            cursor = page["next_cursor"]
            if cursor is None:
                return

    def _json(self, method: str, path: str, **request: Any) -> Json:
        answer = self._repeated(method, path, **request)
        try:
            body: Json = answer.json()
        except ValueError:
            body = {"code": "not_json", "detail": f"{path} answered {answer.status_code} without JSON"}
        if answer.is_error:
            raise ProblemError(answer.status_code, body)
        return body

    def _repeated(self, method: str, path: str, **request: Any) -> httpx.Response:
        pause = 0.2
        for left in range(TRIES - 1, -1, -1):
            try:
                answer = self._http.request(method, path, **request)
            except httpx.TransportError:
                if not left:
                    raise
            else:
                if answer.status_code not in (429, 503) or not left:
                    return answer
                pause = max(pause, _seconds(answer.headers.get("Retry-After", "")))
            time.sleep(min(pause, LONGEST_PAUSE))
            pause *= 2
        raise AssertionError("unreachable")

    def close(self) -> None:
        """Give back the connections."""
        self._http.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def _seconds(retry_after: str) -> float:
    """The Retry-After header (RFC 9110 §10.2.3): seconds, or a date; 0 if it says neither."""
    if retry_after.isdecimal():
        return float(retry_after)
    try:
        return max(0.0, (parsedate_to_datetime(retry_after) - datetime.now(UTC)).total_seconds())
    except (TypeError, ValueError):
        return 0.0
