"""Requests that no honest client sends: odd paths, heads, hosts, origins and bodies. Always a problem, never a 500."""

import gzip
import json
import re
import socket
from collections.abc import Iterator
from datetime import UTC, datetime
from typing import Any

import pytest

from service.settings import Settings
from service.web.headers import HEADERS
from service.workflows.callers import create_key
from tests.web.service import Service, running

GOOD: dict[str, Any] = {"subject": "A", "x": [1, 2, 3, 4, 5], "y": [1, 2, 3, 4, 5.1]}


@pytest.fixture(scope="module")
def open_service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    """Without keys."""
    with running(Settings(data_dir=tmp_path_factory.mktemp("open"))) as one:
        yield one


def raw(service: Service, request: bytes) -> tuple[int, bytes]:
    """Send bytes; the status of the first answer (0 if the connection was closed without one), and all of it."""
    host, port = service.address.removeprefix("http://").split(":")
    with socket.create_connection((host, int(port)), timeout=20) as connection:
        connection.sendall(request)
        answer = b""
        while not whole(answer) and (chunk := connection.recv(65536)):
            answer += chunk
    return (int(answer.split(b" ")[1]) if answer else 0), answer


def whole(answer: bytes) -> bool:
    head, _, body = answer.partition(b"\r\n\r\n")
    length = re.search(rb"content-length: (\d+)", head.lower())
    return length is not None and len(body) >= int(length[1])


def get(path: bytes, *headers: bytes, host: bytes = b"127.0.0.1") -> bytes:
    return b"\r\n".join([b"GET " + path + b" HTTP/1.1", b"Host: " + host, *headers, b"Connection: close", b"", b""])


PATHS = {
    b"/v1/jobs/%00": 404,
    b"/v1/jobs/a%00b/verdict": 404,
    b"/v1/jobs/%2e%2e": 422,
    b"/v1/jobs/..%2f..%2fetc%2fpasswd": 404,  # a slash is a slash, encoded or not: no such path
    b"/v1/jobs/../../etc/passwd": 404,
    b"/docs/files/..%2f..%2f..%2fsettings.py": 404,
    b"/docs/files/../../../settings.py": 404,
    b"/docs/files/%2e%2e/%2e%2e/app.py": 404,
    b"/docs/files/%00": 404,
    b"/docs/files": 404,
    b"/v1/jobs/%ff%fe": 422,
    b"/v1/jobs/%": 422,
    b"/v1/jobs/%zz": 422,
    b"/v1/jobs/" + b"a" * 5000: 422,
    b"/v1/jobs/" + b"a/" * 2000: 404,
    b"//v1/jobs": 404,
    b"/v1//jobs": 404,
    b"/v1/jobs/": 404,
    b"/V1/jobs": 404,
    b"/v1/jobs;x=1": 404,
    b"/v1/jobs?cursor=%00": 422,
    b"/v1/jobs?subject=%ff": 200,
    b"/v1/jobs?limit=1&limit=2": 422,
    b"/v1/jobs?statee=queued": 422,
    b"/v1/jobs?" + b"a=1&" * 3000: 422,
    b"/healthz?x=1": 422,
    b"*": 404,
}


@pytest.mark.parametrize(("path", "status"), PATHS.items(), ids=[path[:40].decode() for path in PATHS])
def test_odd_paths(open_service: Service, path: bytes, status: int) -> None:
    found, answer = raw(open_service, get(path))
    assert found == status
    if status >= 400:
        head, _, body = answer.partition(b"\r\n\r\n")
        assert b"application/problem+json" in head
        assert json.loads(body)["status"] == status


REFUSED_BY_THE_SERVER = {
    "absolute form, another host": b"GET http://evil.example/v1/jobs HTTP/1.1\r\nHost: evil.example\r\n\r\n",
    "no version": b"GET /v1/jobs\r\n\r\n",
    "a space in the path": b"GET /v1/ jobs HTTP/1.1\r\nHost: 127.0.0.1\r\n\r\n",
    "a NUL in a header": b"GET /v1/jobs HTTP/1.1\r\nHost: 127.0.0.1\r\nX-A: a\x00b\r\n\r\n",
    "two lengths": b"POST /v1/jobs HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Length: 2\r\nContent-Length: 3\r\n\r\n{}",
    "length and chunks": b"POST /v1/jobs HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Type: application/json\r\n"
    b"Content-Length: 2\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
    "a negative length": b"POST /v1/jobs HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Length: -1\r\n\r\n",
    "a long head": b"GET /v1/jobs HTTP/1.1\r\nHost: 127.0.0.1\r\nX-A: " + b"a" * 2**20 + b"\r\n\r\n",
    "many headers": b"GET /v1/jobs HTTP/1.1\r\nHost: 127.0.0.1\r\n" + b"X-A: b\r\n" * 50_000 + b"\r\n",
}


@pytest.mark.parametrize("request_", REFUSED_BY_THE_SERVER.values(), ids=REFUSED_BY_THE_SERVER.keys())
def test_what_is_no_http_is_refused(open_service: Service, request_: bytes) -> None:
    try:
        status, _ = raw(open_service, request_)
    except (ConnectionResetError, BrokenPipeError):
        status = 0
    assert status == 0 or 400 <= status < 500
    assert open_service.http.get("/healthz").status_code == 200


def test_absolute_form_of_this_host_is_the_same_path(open_service: Service) -> None:
    address = open_service.address.encode()
    assert raw(open_service, get(address + b"/healthz"))[0] in (200, 404)


@pytest.mark.parametrize("name", ["X-HTTP-Method-Override", "X-HTTP-Method", "X-Method-Override", "_method"])
def test_no_header_changes_the_method(open_service: Service, name: str) -> None:
    job = open_service.http.post("/v1/jobs", json={"dataset": GOOD}).json()
    assert open_service.http.get(f"/v1/jobs/{job['id']}", headers={name: "DELETE"}).json()["state"] == "queued"
    assert open_service.http.get(f"/v1/jobs/{job['id']}", headers={"X-Original-URL": "/healthz"}).json()["id"]


HOSTS = {
    b"localhost": 200,
    b"LOCALHOST:8080": 200,
    b"localhost.": 200,
    b"127.0.0.1": 200,
    b"127.0.0.1:1": 200,
    b"127.9.9.9": 200,
    b"[::1]": 200,
    b"[::1]:8080": 200,
    b"evil.example": 403,
    b"evil.example:8080": 403,
    b"localhost.evil.example": 403,
    b"127.0.0.1.evil.example": 403,
    b"evil.example@localhost": 403,
    b"localhost@evil.example": 403,
    b"192.168.1.1": 403,
    b"0.0.0.0": 403,
    b"[::]": 403,
    b"[::1": 403,
    b"::1": 403,
    b"[fe80::1]": 403,
    b"2130706433": 403,
    b"": 403,
    b"localhost:x": 403,
    b"localhost, evil.example": 403,
    b"\xff": 403,
}


@pytest.mark.parametrize(("host", "status"), HOSTS.items())
def test_hosts_without_keys(open_service: Service, host: bytes, status: int) -> None:
    """DNS rebinding: a page's own name, made to mean this machine, is not this machine's name."""
    found, answer = raw(open_service, get(b"/v1/jobs", host=host))
    assert found in ((status,) if status == 200 else (status, 400))
    if found == 403:
        assert b"foreign_host" in answer


def origins(service: Service) -> list[tuple[str, int]]:
    here = service.address.removeprefix("http://")
    return [
        (f"http://{here}", 200),
        (f"http://{here.upper()}", 200),
        ("http://localhost:1", 403),  # another program of this machine
        ("http://127.0.0.1", 403),
        ("http://evil.example", 403),
        (f"http://{here}.evil.example", 403),
        (f"http://evil.example@{here}", 403),
        ("null", 403),
        ("file://", 403),
        ("http://[::1", 403),
        ("", 403),
    ]


def test_origins_without_keys(open_service: Service) -> None:
    for origin, status in origins(open_service):
        answer = open_service.http.get("/v1/jobs", headers={"Origin": origin})
        assert answer.status_code == status, origin
        assert "access-control-allow-origin" not in answer.headers
    for site, status in (("same-origin", 200), ("none", 200), ("same-site", 403), ("cross-site", 403)):
        assert open_service.http.get("/v1/jobs", headers={"Sec-Fetch-Site": site}).status_code == status


def test_a_form_cannot_post(open_service: Service) -> None:
    """The types that a page of another site can send without asking first."""
    for kind in ("text/plain", "application/x-www-form-urlencoded", "multipart/form-data; boundary=b"):
        for path in ("/v1/jobs", "/v1/datasets", "/v1/batches", "/v1/plans"):
            answer = open_service.http.post(path, content=json.dumps(GOOD).encode(), headers={"Content-Type": kind})
            assert answer.status_code == 415


def test_an_origin_may_be_let_in(open_service: Service) -> None:
    """CORS is off unless set, and then it is for these origins only, with and without keys."""
    friend = "https://bench.example"
    preflight = {"Access-Control-Request-Method": "POST", "Access-Control-Request-Headers": "content-type,prefer"}
    refused = open_service.http.options("/v1/jobs", headers={"Origin": friend} | preflight)
    assert not [name for name in refused.headers if name.startswith("access-control")]
    settings = open_service.settings.model_copy(
        update={"allowed_origins": (friend,), "data_dir": open_service.settings.data_dir / "cors"}
    )
    with running(settings) as service:
        asked = service.http.options("/v1/jobs", headers={"Origin": friend} | preflight)
        assert asked.status_code == 200
        assert asked.headers["access-control-allow-origin"] == friend
        answer = service.http.post("/v1/jobs", json={"dataset": GOOD}, headers={"Origin": friend})
        assert answer.status_code == 202
        assert answer.headers["access-control-allow-origin"] == friend
        assert "access-control-allow-credentials" not in answer.headers
        other = service.http.get("/v1/jobs", headers={"Origin": "https://evil.example"})
        assert other.status_code == 403
        assert "access-control-allow-origin" not in other.headers


def test_with_keys_host_and_origin_do_not_matter(open_service: Service) -> None:
    """A key cannot be sent by a page that does not have it."""
    settings = open_service.settings.model_copy(update={"data_dir": open_service.settings.data_dir / "keys"})
    with running(settings) as service:
        key, _ = create_key(service.database, name="a", role="read", now=datetime(2026, 5, 4, tzinfo=UTC))
        headers = {"Authorization": f"Bearer {key}", "Host": "calibration.example", "Origin": "https://x.example"}
        assert service.http.get("/v1/jobs", headers=headers).status_code == 200


@pytest.mark.parametrize("path", ["/v1/datasets?subject=A", "/v1/jobs", "/v1/batches", "/v1/plans"])
@pytest.mark.parametrize("coding", ["gzip", "deflate", "br", "zstd", "gzip, identity", "GZIP"])
def test_a_compressed_body_is_not_taken(open_service: Service, path: str, coding: str) -> None:
    bomb = gzip.compress(b" " * 2**24)
    kind = "text/csv" if "subject" in path else "application/json"
    answer = open_service.http.post(path, content=bomb, headers={"Content-Type": kind, "Content-Encoding": coding})
    assert answer.status_code == 415
    assert answer.json()["errors"][0]["pointer"] == "/header/content-encoding"


BODIES = {
    "deep list": b'{"subject": "A", "x": ' + b"[" * 100_000 + b"]" * 100_000 + b"}",
    "deep object": b'{"a":' * 100_000 + b"1" + b"}" * 100_000,
    "deep below the parser's limit": b'{"subject": "A", "x": ' + b"[" * 900 + b"]" * 900 + b', "y": []}',
    "key twice": b'{"dataset_id": "a", "dataset_id": "b"}',
    "key twice within": b'{"dataset": {"x": [1], "x": [2]}}',
    "key twice, written otherwise": b'{"dataset_id": "a", "dataset\\u005fid": "b"}',
    "two values": b"{} {}",
    "trailing comma": b'{"dataset_id": "a",}',
    "comment": b'{"dataset_id": "a"} // no',
    "byte order mark": b"\xef\xbb\xbf{}",
    "UTF-16": '{"dataset_id": "a"}'.encode("utf-16"),
    "NUL": b'{"dataset_id": "a\\u0000"}',
    "proto": b'{"__proto__": {"a": 1}}',
}


@pytest.mark.parametrize("path", ["/v1/datasets", "/v1/jobs", "/v1/batches", "/v1/plans"])
@pytest.mark.parametrize("body", BODIES.values(), ids=BODIES.keys())
def test_odd_json(open_service: Service, path: str, body: bytes) -> None:
    answer = open_service.http.post(path, content=body, headers={"Content-Type": "application/json"})
    assert answer.status_code in (400, 422)
    assert answer.json()["errors"]
    assert len(answer.content) < 20_000


def test_a_problem_does_not_grow_with_the_input(open_service: Service) -> None:
    many = GOOD | {f"k{i}": i for i in range(10_000)} | {"x": ["a" * 10_000] * 1000}
    answer = open_service.http.post("/v1/datasets", json=many)
    assert answer.status_code == 422
    assert len(answer.json()["errors"]) == 20
    assert len(answer.content) < 20_000
    long = open_service.http.post("/v1/datasets", json=GOOD | {"k" * 100_000: 1})
    assert long.status_code == 422
    assert len(long.content) < 20_000


def test_a_large_body_is_refused_by_its_stated_length(open_service: Service) -> None:
    settings = replace_limit(open_service, body_bytes=2048)
    head = (
        b"POST /v1/jobs HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Type: application/json\r\nContent-Length: 999999999\r\n"
    )
    with running(settings) as service:
        status, answer = raw(service, head + b"Connection: close\r\n\r\n")
        assert status == 413
        assert b"2048" in answer


def replace_limit(service: Service, **limits: Any) -> Settings:
    return service.settings.model_copy(update={"data_dir": service.settings.data_dir / "limits", **limits})


def test_every_limit_is_named_in_its_problem(open_service: Service) -> None:
    settings = replace_limit(open_service, points=4, batch_size=2, page_limit=7)
    with running(settings) as service:
        for path, body, said in (
            ("/v1/datasets", GOOD, "at most 4"),
            ("/v1/jobs", {"dataset": GOOD}, "at most 4"),
            ("/v1/batches", {"datasets": [GOOD] * 3}, "at most 2"),
        ):
            answer = service.http.post(path, json=body)
            assert (answer.status_code, answer.json()["code"]) == (413, "too_large")
            assert said in answer.json()["detail"]
        lines = b"{}\n" * 1_000_000  # none of them is looked at
        answer = service.http.post("/v1/batches", content=lines, headers={"Content-Type": "application/x-ndjson"})
        assert (answer.status_code, answer.json()["code"]) == (413, "too_large")
        for path in ("/v1/jobs", "/v1/datasets", "/v1/batches", "/v1/plans", "/v1/verdicts"):
            assert service.http.get(path, params={"limit": 7}).status_code == 200
            refused = service.http.get(path, params={"limit": 8})
            assert refused.json()["errors"] == [{"pointer": "/query/limit", "message": "must be at most 7"}]
        words = service.http.get("/openapi.json").json()["info"]["description"]
        for limit in ("4 points", "2 datasets in a batch", "7 items on a page"):
            assert limit in words


def test_head_and_options(open_service: Service) -> None:
    job = open_service.http.post("/v1/jobs", json={"dataset": GOOD}).json()
    for path in ("/v1/jobs", f"/v1/jobs/{job['id']}", "/healthz", "/openapi.json", f"/v1/jobs/{job['id']}/events"):
        head = open_service.http.head(path)
        assert head.status_code == 200
        assert head.content == b""
        if not path.endswith("events"):
            assert head.headers["content-type"] == open_service.http.get(path).headers["content-type"]
    missing = open_service.http.head("/v1/jobs/none")
    assert (missing.status_code, missing.content) == (404, b"")
    for path, allow in (
        ("/v1/jobs", "GET, HEAD, POST, OPTIONS"),
        (f"/v1/jobs/{job['id']}", "GET, HEAD, DELETE, OPTIONS"),
        ("/healthz", "GET, HEAD, OPTIONS"),
    ):
        options = open_service.http.options(path)
        assert (options.status_code, options.headers["allow"]) == (204, allow)
        for method in ("PUT", "PATCH", "TRACE", "PROPFIND"):
            refused = open_service.http.request(method, path)
            assert (refused.status_code, refused.headers["allow"]) == (405, allow)
            assert refused.json()["code"] == "method_not_allowed"
    assert open_service.http.options("/nothing").status_code == 404


def test_security_headers_stand_on_every_answer(open_service: Service) -> None:
    for path in ("/v1/jobs", "/v1/jobs/none", "/nothing", "/docs", "/docs/files/swagger-ui.css", "/metrics"):
        headers = open_service.http.get(path).headers
        assert headers["x-content-type-options"] == "nosniff"
        assert headers["x-frame-options"] == "DENY"
        assert headers["referrer-policy"] == "no-referrer"
        assert "default-src 'none'" in headers["content-security-policy"]
    assert open_service.http.get("/v1/jobs").headers["cache-control"] == "no-store"


def test_an_unexpected_error_has_the_security_headers_once(
    open_service: Service, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It is answered outside every middleware."""

    def fall(*_: object, **__: object) -> None:
        raise RuntimeError("made by a test")

    monkeypatch.setattr("service.web.routes.jobs.list_jobs", fall)
    broken = open_service.http.get("/v1/jobs", headers={"Connection": "close"})  # as the server does after an error
    monkeypatch.undo()
    assert (broken.status_code, broken.json()["code"]) == (500, "internal_error")
    assert "made by a test" not in broken.text
    whole = open_service.http.get("/v1/jobs").headers
    for name in (*(name.decode() for name, _ in HEADERS), "cache-control"):
        assert broken.headers.get_list(name) == whole.get_list(name) != []
