"""Every number on a page is the API's: exact in its value, rounded in its text."""

from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from service.web.pages.numbers import number, rounded, seconds, unrounded
from tests.web.examples import BOWED, DATASET, PLAN
from tests.web.pages.reading import holds, numbers
from tests.web.service import Service

WEIGHTED = {**BOWED, "u_y": [0.001 * y for y in BOWED["y"]], "subject": "weighted"}
CASES: dict[str, tuple[dict[str, Any], dict[str, Any]]] = {
    "two series, error permitted": (DATASET, PLAN),
    "bowed": (BOWED, {}),
    "weights": (WEIGHTED, {"requirements": {"min_levels": 5, "min_r2": 0.99, "max_unseen_bend": 0.01}}),
    "exact": ({"subject": "exact", "x": [0, 1, 2, 3, 4, 5, 6], "y": [1, 3, 5, 7, 9, 11, 13]}, {}),
    "shares": (DATASET, {"requirements": {"back_calculated": {"limit_percent": 5, "min_share": 0.8}}}),
}


@pytest.mark.parametrize("case", CASES)
def test_job_and_report(service: Service, case: str):
    dataset, plan = CASES[case]
    job = service.http.post("/v1/jobs", json={"dataset": dataset, "plan": plan}).json()["id"]
    service.work()
    answer = service.http.get(f"/v1/jobs/{job}").json()
    stored = service.http.get(f"/v1/datasets/{answer['dataset_id']}?include=points").json()
    for address, least in ((f"/job/{job}", 60), (f"/job/{job}/report", 30)):
        page = service.http.get(address)
        assert page.status_code == 200
        of_dataset = [one for one in numbers(page.text) if one[0].startswith(("/summary", "/points"))]
        assert len(of_dataset) >= 4
        assert holds(page.text, stored, of="/summary") + holds(page.text, stored, of="/points") == len(of_dataset)
        of_job = sum(holds(page.text, answer, of=of) for of in ("/result", "/plan", "/attempts", "/priority"))
        assert of_job == len(list(numbers(page.text))) - len(of_dataset)
        assert of_job >= least


def test_every_coefficient_and_candidate_is_there(service: Service):
    job = service.http.post("/v1/jobs", json={"dataset": BOWED}).json()["id"]
    service.work()
    result = service.http.get(f"/v1/jobs/{job}").json()["result"]
    shown = {pointer for pointer, _, _ in numbers(service.http.get(f"/job/{job}").text)}
    for i, one in enumerate(result["candidates"]):
        for path in ("degree", "cv/rmse_mean", "cv/rmse_sd", "rss", "press", "loo/rmse", "aicc", "bic", "r2", "step/p"):
            value: Any = one
            for part in path.split("/"):
                value = value[part]
            assert value is None or f"/result/candidates/{i}/{path}" in shown
    for k in range(len(result["curve"]["coefficients"])):
        assert f"/result/curve/coefficients/{k}" in shown
        assert f"/result/curve/power/coefficients/{k}" in shown


def test_history_batch_and_plans(service: Service):
    batch = service.http.post("/v1/batches", json={"datasets": [DATASET, BOWED, {"subject": "bad", "x": [1]}]}).json()
    plan = service.http.post("/v1/plans", json={"name": "class 0.1", "plan": PLAN}).json()
    service.work()
    for page, document in (
        (f"/batch/{batch['id']}", service.http.get(f"/v1/batches/{batch['id']}").json()),
        ("/batches", service.http.get(f"/v1/batches/{batch['id']}").json()),
        ("/plans", service.http.get(f"/v1/plans/{plan['id']}").json()),
    ):
        text = service.http.get(page).text
        assert holds(text, document) == len(list(numbers(text))) > 0
    listed = service.http.get("/v1/jobs").json()["items"]
    shown = [value for pointer, value, _ in numbers(service.http.get("/history").text) if pointer == "/chosen_degree"]
    assert shown == [job["chosen_degree"] for job in listed]


@pytest.mark.parametrize(
    ("value", "digits", "text"),
    [
        (0, 4, "0"),
        (12, 4, "12"),
        (123456789, 4, "123456789"),
        (3.0, 4, "3"),
        (0.013503240662, 4, "0.0135"),
        (-1.5, 4, "\N{MINUS SIGN}1.5"),
        (4e-30, 2, "4e\N{MINUS SIGN}30"),
        (1.0716e-5, 3, "1.07e\N{MINUS SIGN}5"),
        (123456.7, 4, "1.235e5"),
        (0.99964282, 7, "0.9996428"),
    ],
)
def test_rounding(value: float, digits: int, text: str):
    assert rounded(value, digits) == text


def test_a_number_keeps_all_its_digits():
    made = str(number({"a/b": [0.1 + 0.2]}, "/a~1b/0", 3))
    assert made == '<data value="0.30000000000000004" data-at="/a~1b/0">0.3</data>'
    assert "none" in str(number({"p": None}, "/p"))


@pytest.mark.parametrize("value", [0.1 + 0.2, -1.5, 19998390960815.906, 2.0, 1e22, -3.356643356643326e-06, 5e-324, 12])
def test_an_unrounded_number_reads_back_the_same_and_is_short(value: float):
    assert float(unrounded(value)) == value
    assert len(unrounded(value)) <= len(repr(value))


def test_printed_coefficients_compute_the_curve_where_x_lies_far_from_0(service: Service):
    """Rounded to 12 digits those of the power form were off by 5 here, and the readings scatter by 0.007."""
    x = 1e8 + np.linspace(0, 100, 21)
    y = 5 + 0.3 * (x - 1e8) + 0.002 * (x - 1e8) ** 2 + np.random.default_rng(1).normal(0, 0.013, 21)
    job = service.http.post("/v1/jobs", json={"dataset": {"subject": "far", "x": x.tolist(), "y": y.tolist()}}).json()
    service.work()
    fitted = service.http.get(f"/v1/jobs/{job['id']}").json()["result"]["diagnostics"]["points"]["fitted"]
    for address in (f"/job/{job['id']}", f"/job/{job['id']}/report"):
        read = {pointer: text for pointer, _, text in numbers(service.http.get(address).text)}
        power, chebyshev = (
            [float(read[f"/result/curve/{name}/{k}"]) for k in range(3)]
            for name in ("power/coefficients", "coefficients")
        )
        exactly = [float(sum(Fraction(c) * Fraction(at) ** k for k, c in enumerate(power))) for at in x]
        np.testing.assert_allclose(exactly, fitted, rtol=0, atol=0.005)
        a, b = (float(read[f"/result/curve/domain/{end}"]) for end in (0, 1))
        t = (2 * x - a - b) / (b - a)
        np.testing.assert_allclose(np.polynomial.chebyshev.chebval(t, chebyshev), fitted, rtol=0, atol=1e-9)


@pytest.mark.parametrize(
    ("value", "text"),
    [(None, "none"), (0.0123, "12 ms"), (12.34, "12.3 s"), (61, "1 min 1 s"), (3725, "1 h 2 min"), (90061, "1 d 1 h")],
)
def test_durations(value: float | None, text: str):
    assert seconds(value) == text
