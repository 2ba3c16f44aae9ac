"""What pages say where something is missing, wrong, or cannot be seen, and the way from there to other pages."""

import re
from typing import Any
from urllib.parse import urlencode

import pytest
from sqlalchemy import update

from service.store.tables import jobs, named_plans
from service.web.pages.words import visible
from tests.web.examples import BOWED, PLAN
from tests.web.pages.test_pages import put
from tests.web.service import Service


def test_error_pages_keep_the_way_to_the_other_pages(service: Service, monkeypatch: pytest.MonkeyPatch):
    for address in ("/job/none-such", "/batch/none-such", "/plan/none-such", "/history?state=odd", "/batch/b?first=x"):
        page = service.http.get(address)
        assert page.status_code in (404, 422), address
        for part in ("history", "queue", "batches", "plans", "try"):
            assert f'<li><a href="/{part}">' in page.text, address
        assert "no keys, this machine only" in page.text
    monkeypatch.setattr(service.context.rates, "take", lambda _: 7)
    busy = service.http.get("/history")
    assert (busy.status_code, busy.headers["retry-after"]) == (429, "7")
    assert '<li><a href="/queue">' in busy.text
    stranger = service.http.get("/history", headers={"Host": "evil.example"})
    assert stranger.status_code == 403
    assert "<nav" not in stranger.text


def test_errors_name_the_fields_of_the_form(service: Service):
    page = service.http.get("/history", params={"since": "yesterday"}).text
    assert "Queued from must be a date" in page
    assert "State must be one of" in service.http.get("/history?state=odd").text
    assert "/query/" not in page


def test_a_batch_names_its_plan_where_it_has_a_name(service: Service):
    def batch(**plan: Any) -> str:
        posted = service.http.post("/v1/batches", json={"datasets": [BOWED, {"subject": "bad", "x": [1]}], **plan})
        return service.http.get(f"/batch/{posted.json()['id']}").text

    assert "a plan without a name" in batch(plan=PLAN)
    named = service.http.post("/v1/plans", json={"name": "gauges & more", "plan": PLAN}).json()
    service.http.post("/v1/plans", json={"name": "gauges & more", "plan": {"max_degree": 2}}).raise_for_status()
    page = batch(plan_id=named["id"])
    assert f'<a href="/plan/{named["id"]}">gauges &amp; more, version 1</a>' in page
    assert named["plan_digest"][:12] in page
    assert "version 2" not in page
    assert "not kept: refused" in page
    assert "x in the JSON needs at least 3 items, has 1; y in the JSON is missing" in page
    other = service.http.post("/v1/plans", json={"name": "all", "plan": PLAN}).json()
    assert f'<a href="/plan/{other["id"]}">all, version 1</a>, also kept as' in batch(plan=PLAN)


def test_names_that_nobody_could_see_are_said_in_words(service: Service):
    """They are refused now; who was there before keeps them."""
    nothing = "\u200b\u3000\u2800"
    job = put(service)
    batch = service.http.post("/v1/batches", json={"datasets": [BOWED]}).json()["id"]
    service.http.post("/v1/plans", json={"name": "p", "plan": PLAN}).raise_for_status()
    service.work()
    with service.database.write() as connection:
        connection.execute(update(jobs).values(subject=nothing))
        connection.execute(update(named_plans).values(name=nothing))
    place = urlencode({"name": nothing})
    for address in ("/history", f"/job/{job}", f"/batch/{batch}", "/plans"):
        assert re.search(r"<a [^>]*>\(3 blank characters\)</a>", service.http.get(address).text), address
    for address in (f"/job/{job}/report", f"/subject?{place}"):
        assert re.search(r"<h1[^>]*>[^<]*\(3 blank characters\)</h1>", service.http.get(address).text), address
    assert visible(" ") == "(1 blank character)"
    assert visible(" x ") == " x "


def test_the_history_says_how_its_filters_match(service: Service):
    put(service)
    assert "the whole name as it was posted, capitals and small letters told apart" in service.http.get("/history").text
    for asked in (BOWED["subject"].lower(), BOWED["subject"][:-1]):
        assert "No job matches" in service.http.get("/history", params={"subject": asked}).text
