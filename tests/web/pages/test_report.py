"""The PDF report: its pages, its words, and the API's numbers in it."""

import io
import json
import re
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
from pypdf import PdfReader

from service.store.codec import plan_document
from service.web.pages.numbers import rounded, unrounded
from service.web.pages.plan_lines import plan_lines
from service.web.pages.readings import MOST_LISTED
from service.web.pages.words import CAUTIONS
from service.web.schemas.plans import PlanBody
from tests.web.examples import BOWED, DATASET, PLAN
from tests.web.pages.reading import numbers
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


def test_the_readings_stand_beside_fitted_values_and_residuals(service: Service):
    job, text, _ = report(service, DATASET, PLAN)
    points = job["result"]["diagnostics"]["points"]
    page = service.http.get(f"/job/{job['id']}/report").text
    shown = {pointer for pointer, _, _ in numbers(page)}
    for i, (x, y, series) in enumerate(zip(DATASET["x"], DATASET["y"], DATASET["series"], strict=True)):
        fitted, residual = rounded(points["fitted"][i], 8), rounded(points["residual"][i])
        assert f"{i + 1} {x} {unrounded(y)} {fitted} {residual} {series}" in text
        places = {f"/points/x/{i}", f"/points/y/{i}"}
        places |= {f"/result/diagnostics/points/{name}/{i}" for name in ("fitted", "residual")}
        assert places <= shown
    assert page.count(f'<td class="long">{DATASET["series"][0]}</td>') == 6


def test_stated_uncertainties_stand_in_the_table(service: Service):
    dataset = {**BOWED, "u_x": [0.0125] * 10, "u_y": [0.00375] * 10}
    _, text, _ = report(service, dataset)
    assert "No. x u_x y u_y fitted residual" in text
    assert f"1 {dataset['x'][0]} 0.0125 {dataset['y'][0]} 0.00375 " in text


@pytest.mark.parametrize(("copies", "fitted"), [(40, True), (210, False)])
def test_of_many_readings_some_are_listed_and_the_others_are_told_where(service: Service, copies: int, fitted: bool):
    """Above 2,000 points the result holds no fitted values, so none are printed."""
    noise = np.random.default_rng(2).normal(0, 1e-4, 10 * copies)
    dataset = {**BOWED, "x": BOWED["x"] * copies, "y": (np.tile(BOWED["y"], copies) + noise).tolist()}
    job, text, pages = report(service, dataset)
    page = service.http.get(f"/job/{job['id']}/report").text
    total = 10 * copies
    where = f"GET /v1/datasets/{job['dataset_id']}?include=points"
    for said in (text, re.sub(r"\s+", " ", page)):
        assert f"Listed are the first {MOST_LISTED} of {total} readings in the order measured" in said
        assert f"The other {total - MOST_LISTED} are answered by {where}" in said
        assert ("left out above 2000 points; they follow from the curve and the dataset" in said) is not fitted
        assert (f"GET /v1/jobs/{job['id']} in result.diagnostics.points" in said) is fitted
    assert pages <= 4
    assert f"{MOST_LISTED} {dataset['x'][MOST_LISTED - 1]} {unrounded(dataset['y'][MOST_LISTED - 1])}" in text
    shown = {pointer for pointer, _, _ in numbers(page)}
    assert f"/points/y/{MOST_LISTED - 1}" in shown
    assert f"/points/y/{MOST_LISTED}" not in shown
    assert ("/result/diagnostics/points/fitted/0" in shown) is fitted


WHOLE_PLAN = {
    "min_degree": 1,
    "max_degree": 4,
    "intercept": False,
    "weights": "u_y",
    "rule": "bic",
    "resampling": {"scheme": "k_fold", "folds": 5, "repeats": 7, "seed": 11},
    "working_range": [6.25, 45.5],
    "confidence": 0.9,
    "known_uncertainty": True,
    "requirements": {
        "max_permissible_error": {"value": 0.125, "of": "x", "kind": "percent_of_span"},
        "monotonic": False,
        "min_levels": 9,
        "min_r2": 0.875,
        "back_calculated": {"limit_percent": 15.5, "limit_percent_lowest": 20.5, "min_share": 0.75},
        "max_unseen_bend": 0.0625,
    },
}


def test_the_plan_is_printed_line_by_line(service: Service):
    dataset = {**BOWED, "u_y": [0.001] * 10, "x_unit": "kN", "y_unit": "mV/V"}
    job, text, _ = report(service, dataset, WHOLE_PLAN)
    for line in (
        "Degrees tried 1 to 4",
        "Rule BIC",
        "Weights u_y",
        "Intercept none: the curve goes through the origin",
        "Stated uncertainty taken as absolute",
        "Working range 6.25 to 45.5 kN",
        "Confidence 0.9",
        "Left out in turn 5 folds of points, dealt 7 times, seed 11",
        "Maximum permissible error 0.125 % of span, in x",
        "Largest unseen bend 0.0625 mV/V",
        "Monotonic not required",
        "Least number of levels 9",
        "Least R-squared 0.875",
        "Back-calculated x within 15.5 %, at the lowest level 20.5 %, for a share of 0.75 of the points",
    ):
        assert line in text
    for address in (f"/job/{job['id']}", f"/job/{job['id']}/report"):
        shown = {pointer for pointer, _, _ in numbers(service.http.get(address).text)}
        assert {f"/plan{pointer}" for pointer in _places(job["plan"])} <= shown


def test_no_field_of_a_plan_is_left_out():
    """Changing any one field changes what is printed."""
    whole = json.loads(plan_document(PlanBody.model_validate(WHOLE_PLAN).plan("")))
    printed = plan_lines(whole, x_unit="kN", y_unit="mV/V")
    named = {part.pointer for line in printed for part in line.parts if not isinstance(part, str)}
    assert named == {f"/plan{pointer}" for pointer in _places(whole)}
    for field, other in (("intercept", True), ("weights", "equal"), ("rule", "aicc"), ("known_uncertainty", False)):
        assert plan_lines(whole | {field: other}, x_unit="kN", y_unit="mV/V") != printed
    assert set(whole) == set(WHOLE_PLAN)
    assert set(whole["requirements"]) == set(WHOLE_PLAN["requirements"])


def _places(value: Any, at: str = "") -> Iterator[str]:
    """Pointers of all numbers in a document."""
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from _places(inner, f"{at}/{key}")
    elif isinstance(value, list):
        for i, inner in enumerate(value):
            yield from _places(inner, f"{at}/{i}")
    elif isinstance(value, (int, float)) and not isinstance(value, bool):
        yield at


def test_what_callers_write_is_only_text(service: Service):
    odd = {"x_unit": "W" * 300, "y_unit": "</para>" + "W" * 300, "series": ["<b>W" + "W" * 150] * 10}
    dataset = {**BOWED, **odd, "subject": "<b>&amp;</b> <font size=99>", "title": "]]> <para/> " + "W" * 300}
    _, text, pages = report(service, dataset)
    assert "<b>&amp;</b> <font size=99>" in text
    assert pages <= 3
