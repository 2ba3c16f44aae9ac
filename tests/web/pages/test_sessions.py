"""Who may look: signing in with a key, what each role sees, and forms that only our pages can send."""

from collections.abc import Iterator
from datetime import UTC, datetime, timedelta

import httpx
import pytest
from sqlalchemy import select, update

from service.store.keys import hash_of
from service.store.tables import sessions
from service.workflows.callers import create_key, revoke_key
from tests.web.examples import BOWED
from tests.web.pages.reading import form_token
from tests.web.service import Service

ROLES = ("submit", "read", "admin")


@pytest.fixture
def keys(service: Service) -> dict[str, str]:
    """A key of each role, by role."""
    return {
        role: create_key(service.database, name=f"{role} key", role=role, now=datetime.now(UTC))[0] for role in ROLES
    }


@pytest.fixture
def browser(service: Service) -> Iterator[httpx.Client]:
    """Somebody with a cookie jar."""
    with httpx.Client(base_url=service.address, follow_redirects=True, timeout=60) as client:
        yield client


def sign_in(browser: httpx.Client, key: str, *, back: str = "/history") -> httpx.Response:
    """As the form does."""
    token = form_token(browser.get("/sign-in", params={"next": back}).text)
    return browser.post("/sign-in", data={"form_token": token, "key": key, "next": back})


def put(service: Service, key: str) -> str:
    answer = service.http.post("/v1/jobs", json={"dataset": BOWED}, headers={"Authorization": f"Bearer {key}"})
    return str(answer.json()["id"])


def test_without_a_session_every_page_leads_to_sign_in(service: Service, keys: dict[str, str]):
    job = put(service, keys["submit"])
    for address in ("/history?state=queued", f"/job/{job}", f"/job/{job}/figures/curve.svg", "/queue", "/try"):
        answer = service.http.get(address)
        assert answer.status_code == 303
        assert answer.headers["location"].startswith("/sign-in?next=%2F")
    assert service.http.get("/look/look.css").status_code == 200


def test_signing_in_and_out(service: Service, browser: httpx.Client, keys: dict[str, str]):
    page = sign_in(browser, keys["read"], back="/queue")
    assert page.url.path == "/queue"
    assert "read key, read" in page.text
    answer = page.history[-1]
    cookie = answer.headers["set-cookie"]
    assert "HttpOnly" in cookie
    assert "SameSite=strict" in cookie
    token = browser.cookies["leastbend_session"]
    with service.database.read() as connection:
        [(kept,)] = connection.execute(select(sessions.c.hash))
    assert kept == hash_of(token)
    out = browser.post("/sign-out", data={"form_token": form_token(page.text)})
    assert out.url.path == "/sign-in"
    assert service.http.get("/history", headers={"Cookie": f"leastbend_session={token}"}).status_code == 303


def test_a_wrong_key_is_told_and_gets_nothing(browser: httpx.Client, keys: dict[str, str]):
    for key in ("lbk_wrong", "", "x" * 500, keys["read"] + "x"):
        page = sign_in(browser, key)
        assert page.status_code == 401
        assert "not known, or was revoked" in page.text
        assert "leastbend_session" not in browser.cookies


def test_a_session_ends_with_its_time_and_with_its_key(service: Service, browser: httpx.Client, keys: dict[str, str]):
    sign_in(browser, keys["read"])
    assert browser.get("/history").url.path == "/history"
    with service.database.write() as connection:
        connection.execute(update(sessions).values(expires_at=datetime.now(UTC) - timedelta(seconds=1)))
    assert browser.get("/history").url.path == "/sign-in"
    sign_in(browser, keys["admin"])
    assert browser.get("/history").url.path == "/history"
    revoke_key(service.database, name="admin key", now=datetime.now(UTC))
    assert browser.get("/history").url.path == "/sign-in"


def test_each_role_sees_what_its_key_sees(service: Service, browser: httpx.Client, keys: dict[str, str]):
    mine, other = put(service, keys["submit"]), put(service, keys["admin"])
    service.work()
    for role, sees_other, may_submit in (("submit", False, True), ("read", True, False), ("admin", True, True)):
        browser.cookies.clear()
        sign_in(browser, keys[role])
        history = browser.get("/history").text
        assert mine in history
        assert (other in history) is sees_other
        for address in (f"/job/{other}", f"/job/{other}/figures/curve.svg", f"/job/{other}/report.pdf"):
            assert browser.get(address).status_code == (200 if sees_other else 404)
        page = browser.get("/try").text
        assert ("<textarea" in page) is may_submit
        sent = browser.post(
            "/try", data={"form_token": form_token(page), "subject": "s", "table": "x,y\n0,0\n1,1\n2,2\n3,3"}
        )
        assert sent.status_code == (200 if may_submit else 403)
        assert ("read key" in browser.get("/queue").text) is (role == "read")


def test_one_can_sign_out_from_the_page_of_an_error(browser: httpx.Client, keys: dict[str, str]):
    sign_in(browser, keys["read"])
    page = browser.get("/job/none-such")
    assert page.status_code == 404
    assert "read key, read" in page.text
    out = browser.post("/sign-out", data={"form_token": form_token(page.text)})
    assert out.url.path == "/sign-in"


def test_forms_need_their_token_and_their_origin(service: Service, browser: httpx.Client):
    job = service.http.post("/v1/jobs", json={"dataset": BOWED}).json()["id"]
    token = form_token(browser.get(f"/job/{job}").text)
    address = f"/job/{job}/cancel"
    assert browser.post(address).status_code == 415
    assert browser.post(address, data={"form_token": ""}).status_code == 403
    assert browser.post(address, data={"form_token": "0" * 64}).status_code == 403
    stranger = httpx.post(service.address + address, data={"form_token": token})
    assert stranger.status_code == 403  # without the cookie
    foreign = browser.post(address, data={"form_token": token}, headers={"Origin": "http://127.0.0.1:1"})
    assert foreign.status_code == 403
    assert service.http.get(f"/v1/jobs/{job}").json()["state"] == "queued"
    own = browser.post(address, data={"form_token": token}, headers={"Origin": service.address})
    assert own.status_code == 200
    assert service.http.get(f"/v1/jobs/{job}").json()["state"] == "cancelled"


def test_without_keys_only_this_machine_s_own_pages(service: Service):
    for headers in ({"Host": "evil.example"}, {"Sec-Fetch-Site": "cross-site"}, {"Origin": "http://evil.example"}):
        answer = service.http.get("/history", headers=headers)
        assert answer.status_code == 403
        assert "Not allowed" in answer.text


@pytest.mark.parametrize("back", ["//evil.example", "https://evil.example", "/\\evil.example", "javascript:1", ""])
def test_nobody_is_sent_elsewhere(browser: httpx.Client, keys: dict[str, str], back: str):
    token = form_token(browser.get("/sign-in").text)
    answer = browser.post(
        "/sign-in", data={"form_token": token, "key": keys["read"], "next": back}, follow_redirects=False
    )
    assert (answer.status_code, answer.headers["location"]) == (303, "/history")
