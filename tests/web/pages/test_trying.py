"""The page to try a dataset: paste and file make the same job as the API; what is wrong is said beside the form."""

import json
import re
from html import unescape

import httpx
import pytest

from service.settings import Settings
from service.web.pages.pasted import table_of
from tests.web.examples import BOWED, PLAN
from tests.web.pages.reading import form_token
from tests.web.service import Service, running

TABLE = "\n".join(["x,y", *(f"{x},{y}" for x, y in zip(BOWED["x"], BOWED["y"], strict=True))])


def sent(service: Service, *, file: bytes | None = None, **fields: str) -> httpx.Response:
    """The form as a browser sends it."""
    with httpx.Client(base_url=service.address, follow_redirects=True, timeout=60) as browser:
        data = {"form_token": form_token(browser.get("/try").text), **fields}
        files = {"file": ("data.csv", file or b"")} if file is not None else {"file": ("", b"")}
        return browser.post("/try", data=data, files=files)


def result_of(service: Service, page: httpx.Response) -> dict:
    assert page.url.path.startswith("/job/"), page.text
    service.work()
    return service.http.get(f"/v1/jobs/{page.url.path.removeprefix('/job/')}").json()


@pytest.mark.parametrize(
    "table",
    [TABLE, TABLE.replace(",", ";"), TABLE.replace(",", "\t"), TABLE.replace("\n", "\r\n"), TABLE.partition("\n")[2]],
    ids=["comma", "semicolon", "spreadsheet", "windows", "no header"],
)
def test_paste_is_the_same_job_as_the_api_s(service: Service, table: str):
    page = sent(service, subject=BOWED["subject"], table=table, mpe_value="0.1", mpe_of="x", mpe_kind="percent_of_span")
    job = result_of(service, page)
    same = service.http.post("/v1/jobs", json={"dataset": BOWED, "plan": PLAN}).json()
    service.work()
    other = service.http.get(f"/v1/jobs/{same['id']}").json()
    assert job["plan_digest"] == other["plan_digest"]
    assert job["result"]["provenance"]["dataset_digest"] == other["result"]["provenance"]["dataset_digest"]
    assert job["result"]["provenance"]["result_digest"] == other["result"]["provenance"]["result_digest"]


def test_a_file_goes_before_the_paste(service: Service):
    page = sent(service, file=TABLE.encode(), subject="from file", table="x,y\n1,1", x_unit="kN")
    job = result_of(service, page)
    assert (job["subject"], job["result"]["points"]) == ("from file", 10)
    assert service.http.get(f"/v1/datasets/{job['dataset_id']}").json()["x_unit"] == "kN"


def test_the_json_of_a_dataset(service: Service):
    job = result_of(service, sent(service, table=json.dumps(BOWED)))
    assert job["subject"] == BOWED["subject"]


def test_a_named_plan(service: Service):
    plan = service.http.post("/v1/plans", json={"name": "p", "plan": {"max_degree": 2}}).json()
    job = result_of(service, sent(service, subject="s", table=TABLE, plan_id=plan["id"], max_degree="6"))
    assert job["plan"]["max_degree"] == 2


@pytest.mark.parametrize(
    ("fields", "words"),
    [
        ({"subject": "s", "table": ""}, "Table is empty"),
        ({"table": TABLE}, "Subject is missing"),
        ({"subject": "s", "table": "x,y\n1,2\n2,oops\n3,4"}, "line 3, column y"),
        ({"subject": "s", "table": "x,y\n1,2\n2,3"}, "at least 3 points"),
        ({"subject": "s", "table": "x,z\n1,2\n2,3\n3,4"}, "line 1, column z is not a known column"),
        (
            {"subject": "s", "table": TABLE, "max_degree": "13"},
            "Highest degree tried should be less than or equal to 12",
        ),
        ({"subject": "s", "table": TABLE, "weights": "magic"}, "Weights should be"),
        ({"subject": "s", "table": TABLE, "mpe_value": "-1"}, "Maximum permissible error should be greater than 0"),
        ({"subject": "s", "table": TABLE, "mpe_value": "much"}, "Maximum permissible error should be a valid number"),
        ({"subject": "s", "table": TABLE, "plan_id": "none"}, "Named plan: there is no plan none"),
        ({"subject": "s", "table": "{oops"}, "not JSON"),
    ],
)
def test_what_is_wrong_is_said_and_what_was_given_is_kept(service: Service, fields: dict[str, str], words: str):
    page = sent(service, **fields)
    assert page.status_code == 422
    assert words in page.text
    assert 'role="alert"' in page.text
    if fields.get("subject"):
        assert 'name="subject" value="s"' in page.text


def test_too_large_a_form_is_refused(tmp_path):
    with running(Settings(data_dir=tmp_path / "data", body_bytes=20_000)) as service:
        page = sent(service, subject="s", table="x,y\n" + "1,2\n" * 10_000)
        assert page.status_code == 413
        assert "larger than 20000 bytes" in page.text


def test_tables_as_pasted():
    for pasted, csv in (
        (b"1\t2\n3\t4\n", b"x;y\n1;2\n3;4\n"),
        (b"x,y\r\n1,2\r\n", b"x,y\n1,2\n"),
        (b"1,2\n", b"x,y\n1,2\n"),
        (b"\n \nx;y\n1;2\n\t\n\n", b"x;y\n1;2\n"),
        (b"\xef\xbb\xbf-1,2\n", b"x,y\n-1,2\n"),
    ):
        assert table_of(pasted).csv == csv


GOOD = "\n1,2\n2,3\n3,5\n4,4"


@pytest.mark.parametrize(
    ("table", "said"),
    [
        (
            "Pressure (kPa),Current (mA)" + GOOD,
            ["line 1, column Pressure (kPa) is not a known column", "line 1, column x is missing"],
        ),
        ("\n\nx;V/V\n1;2\n2;3\n3;4", ["line 3, column V/V is not a known column", "line 3, column y is missing"]),
        ("1 2\n2 3\n3 4\n4 5", [f"line {n} has 1 value: x and y are expected, with comma" for n in (1, 2, 3, 4)]),
        ("1,2,up\n2,3,up\n3,4,up", ["line 1 has 3 values: x and y are expected", "name the columns in a first line"]),
        ("0.1,2\n1,oops\n2,3", ["line 2, column y: &#39;oops&#39; is not a number"]),
        ("\n\n0.1\t2\n\n1\toops\n2\t3", ["line 5, column y: &#39;oops&#39; is not a number"]),
        ("\nx,y\n\n1,2\n2,oops", ["line 5, column y: &#39;oops&#39; is not a number"]),
        ("\n0,1\n1,2\n\n2,1e61\n3,4", ["line 5, column y must be finite and at most 1e+60 in size"]),
        ("x,y\n1,2\n\n2,1e61\n3,4", ["line 4, column y must be finite and at most 1e+60 in size"]),
        ('x,y,series\n1,2,"a\nb"\n2,3,c\n3,4,', ["reading 1, column series must be text"]),
        ("x,y\n1,2\n2,3", ["column x needs at least 3 points, has 2"]),
    ],
)
def test_mistakes_in_a_table_are_named_by_the_line_that_was_pasted(service: Service, table: str, said: list[str]):
    page = sent(service, subject="s", table=table)
    assert page.status_code == 422
    listed = problems(page.text)
    for one in said:
        assert one in listed
    assert not re.search(r"(?<![\w<])/\w", listed.replace("V/V", ""))
    kept = re.search(r"<textarea[^>]*>\n(.*?)</textarea>", page.text, re.DOTALL)
    assert kept is not None
    assert unescape(kept[1]).replace("\r\n", "\n") == table


@pytest.mark.parametrize(
    ("dataset", "said"),
    [
        ({"x": [1, 2, 3], "y": [1, "two", 3]}, "y in the JSON, item 2 must be a number"),
        ({"x": [1, 2, 3], "y": [1, 2, 1e61]}, "y in the JSON, item 3 must be finite"),
        ({"x": [1, 2, 3], "y": [1, 2]}, "y in the JSON"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "colour": "red"}, "colour in the JSON is not a known key"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "tags": {"a": 1}}, "tags in the JSON, a must be text"),
    ],
)
def test_mistakes_in_json_are_named_by_their_place(service: Service, dataset: dict, said: str):
    listed = problems(sent(service, subject="s", table=json.dumps(dataset)).text)
    assert said in listed
    assert "/" not in listed.replace("</", "")


def test_a_subject_must_stand_in_the_field_or_in_the_json(service: Service):
    dataset = {name: BOWED[name] for name in ("x", "y")}
    assert "Subject is missing" in problems(sent(service, table=json.dumps(dataset)).text)
    assert result_of(service, sent(service, table=json.dumps(dataset), subject="typed"))["subject"] == "typed"


def test_what_is_typed_wins_over_what_stands_in_the_json(service: Service):
    dataset = {**BOWED, "x_unit": "kN", "y_unit": "V", "title": "Load cell"}
    page = sent(service, file=json.dumps(dataset).encode(), subject="typed", x_unit="N")
    job = result_of(service, page)
    stored = service.http.get(f"/v1/datasets/{job['dataset_id']}").json()
    assert job["subject"] == stored["subject"] == "typed"
    assert (stored["x_unit"], stored["y_unit"], stored["title"]) == ("N", "V", "Load cell")


def test_fields_of_the_plan_are_named_as_the_form_names_them(service: Service):
    assert "Weights is &#34;u_y&#34;, but" in problems(sent(service, subject="s", table=TABLE, weights="u_y").text)
    zero = problems(sent(service, subject="s", table="x,y\n0,1\n1,2\n2,3\n3,4", weights="1/x").text)
    assert "line 2, column x is 0, where the weights" in zero
    plan = service.http.post("/v1/plans", json={"name": "p", "plan": {"min_degree": 9, "max_degree": 9}}).json()
    assert "column x needs at least" in problems(sent(service, subject="s", table=TABLE[:20], plan_id=plan["id"]).text)


def problems(page: str) -> str:
    """What the page lists to be mended."""
    listed = re.search(r'role="alert">.*?</div>', page, re.DOTALL)
    assert listed is not None, page
    return listed[0]
