"""The PDF report: its pages, its words, and the API's numbers in it."""

import io
import re
from typing import Any

import pytest
from pypdf import PdfReader

from service.web.pages.numbers import rounded, unrounded
from service.web.pages.words import CAUTIONS
from tests.web.examples import BOWED, DATASET, PLAN
from tests.web.service import Service


def report(
    service: Service, dataset: dict[str, Any], plan: dict[str, Any] | None = None
) -> tuple[dict[str, Any], str, int]:
    """The job as the API answers it, the report's text on one line, and its number of pages."""
    posted = service.http.post("/v1/jobs", json={"dataset": dataset, **({} if plan is None else {"plan": plan})})
    job = posted.json()["id"]
    service.work()
    answer = service.http.get(f"/v1/jobs/{job}/report.pdf")
    assert answer.status_code == 200, answer.text
    assert answer.headers["content-type"] == "application/pdf"
    assert service.http.get(f"/v1/jobs/{job}/report.pdf").content == answer.content
    reader = PdfReader(io.BytesIO(answer.content))
    text = " ".join(page.extract_text() for page in reader.pages)
    return service.http.get(f"/v1/jobs/{job}").json(), re.sub(r"\s+", " ", text), len(reader.pages)


@pytest.mark.parametrize(("dataset", "plan"), [(DATASET, PLAN), (BOWED, None)])
def test_two_pages_with_verdict_digests_and_cautions(service: Service, dataset: dict[str, Any], plan: Any):
    job, text, pages = report(service, dataset, plan)
    verdict = service.http.get(f"/v1/jobs/{job['id']}/verdict")
    assert pages == 2
    assert f"Calibration curve of {dataset['subject']}" in text
    assert f"{job['verdict'].capitalize()}: degree {job['chosen_degree']}" in text
    for caution in CAUTIONS:
        assert caution in text
    stated = verdict.json()
    for digest in (
        stated["dataset_digest"],
        stated["plan_digest"],
        stated["result_digest"],
        verdict.headers["etag"][1:-1],
    ):
        assert digest in text
    for reason in stated["reasons"]:
        assert reason["message"] in text
    assert "page 1 of 2" in text
    assert "page 2 of 2" in text


def test_its_numbers_are_the_api_s(service: Service):
    job, text, _ = report(service, DATASET, PLAN)
    result = job["result"]
    for one in result["candidates"]:
        for value, digits in ((one["cv"]["rmse_mean"], 4), (one["residual_sd"], 4), (one["aicc"], 5)):
            assert value is None or rounded(value, digits) in text
    for value in (*result["curve"]["power"]["coefficients"], *result["curve"]["coefficients"]):
        assert unrounded(value) in text
    assert f"up to {rounded(result['unseen_bend']['y'])} mA" in text
    for one in result["requirements"]:
        assert one["message"] in text


def test_what_callers_write_is_only_text(service: Service):
    dataset = {**BOWED, "subject": "<b>&amp;</b> <font size=99>", "title": "]]> <para/> " + "W" * 300}
    _, text, pages = report(service, dataset)
    assert "<b>&amp;</b> <font size=99>" in text
    assert pages <= 3
