"""Figures and report over HTTP: drawn once, kept, conditional, and only for who may see the job."""

import subprocess
import sys
from datetime import UTC, datetime

import pytest
from sqlalchemy import select

from service.store.tables import figures
from service.web.figures import desk
from service.workflows.callers import create_key
from service.workflows.figures import figure_inputs
from tests.web.examples import BOWED
from tests.web.service import Service

SVG = "/v1/jobs/{}/figures/curve.svg"


def put(service: Service) -> str:
    answer = service.http.post("/v1/jobs", json={"dataset": BOWED})
    assert answer.status_code == 202, answer.text
    return str(answer.json()["id"])


def kept(service: Service) -> list[tuple[str, str, int, datetime]]:
    with service.database.read() as connection:
        rows = connection.execute(select(figures.c.name, figures.c.format, figures.c.version, figures.c.made_at))
        return [tuple(row) for row in rows]


def test_codes_before_and_without_a_result(service: Service):
    job = put(service)
    waiting = service.http.get(SVG.format(job))
    assert (waiting.status_code, waiting.json()["code"]) == (404, "result_not_ready")
    assert service.http.get(f"/v1/jobs/{job}/report.pdf").json()["code"] == "result_not_ready"
    service.http.delete(f"/v1/jobs/{job}").raise_for_status()
    ended = service.http.get(SVG.format(job))
    assert (ended.status_code, ended.json()["code"]) == (404, "no_result")
    assert service.http.get(f"/v1/jobs/{job}/report.pdf").json()["code"] == "no_result"
    assert service.http.get(SVG.format("nothing")).json()["code"] == "not_found"
    assert service.http.get(f"/v1/jobs/{job}/figures/pie.svg").status_code == 422
    assert kept(service) == []


def test_drawn_once_and_kept_until_the_style_changes(service: Service, monkeypatch: pytest.MonkeyPatch):
    job = put(service)
    service.work()
    first = service.http.get(SVG.format(job))
    assert first.status_code == 200
    assert first.headers["content-type"] == "image/svg+xml"
    assert first.headers["cache-control"] == "private, max-age=86400"
    assert first.headers["content-security-policy"] == "default-src 'none'; style-src 'unsafe-inline'; sandbox"
    [row] = kept(service)
    assert service.http.get(SVG.format(job)).content == first.content
    assert kept(service) == [row]

    again = service.http.get(SVG.format(job), headers={"If-None-Match": first.headers["etag"]})
    assert (again.status_code, again.content) == (304, b"")
    assert again.headers["etag"] == first.headers["etag"]

    monkeypatch.setattr(desk, "VERSION", desk.VERSION + 1)
    assert service.http.get(SVG.format(job)).status_code == 200
    [new] = kept(service)
    assert new[2] == row[2] + 1
    assert new[3] > row[3]


def test_every_figure_as_svg_and_png(service: Service):
    job = put(service)
    service.work()
    for name in ("curve", "degrees", "residuals", "normal", "spread", "leverage", "unseen"):
        svg, png = (service.http.get(f"/v1/jobs/{job}/figures/{name}.{kind}") for kind in ("svg", "png"))
        assert svg.text.startswith("<?xml")
        assert png.headers["content-type"] == "image/png"
        assert png.content.startswith(b"\x89PNG")
    assert len(kept(service)) == 14


def test_only_who_may_see_the_job_gets_its_figures(service: Service):
    job = put(service)
    service.work()
    keys = {
        role: create_key(service.database, name=f"team {role}", role=role, now=datetime.now(UTC))[0]  # type: ignore[arg-type]
        for role in ("submit", "read")
    }
    for address in (SVG.format(job), f"/v1/jobs/{job}/report.pdf"):
        statuses = [
            service.http.get(address, headers={"Authorization": f"Bearer {key}"} if key else {}).status_code
            for key in (None, keys["submit"], keys["read"])
        ]
        assert statuses == [401, 404, 200]
    # A figure that is kept is no way around it either.
    assert service.http.get(SVG.format(job), headers={"Authorization": f"Bearer {keys['submit']}"}).status_code == 404


def test_words_are_gathered_once_for_the_jobs_last_looked_at(service: Service, monkeypatch: pytest.MonkeyPatch):
    first, second = put(service), put(service)
    service.work()
    gathered = []

    def counting(database, caller, job_id):
        gathered.append(job_id)
        return figure_inputs(database, caller, job_id)

    monkeypatch.setattr(desk, "MOST_WORDS", 1)
    monkeypatch.setattr(desk, "figure_inputs", counting)
    pages = [service.http.get(f"/job/{job}").text for job in (first, first, second, first)]
    assert pages[0].count('alt="10 points of') == pages[1].count('alt="10 points of') == 1
    assert gathered == [first, second, first]


def test_a_service_that_draws_nothing_loads_nothing_to_draw_with():
    ask = "import sys, service.web.app; print([m for m in ('matplotlib', 'reportlab', 'PIL') if m in sys.modules])"
    found = subprocess.run([sys.executable, "-c", ask], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"
