"""The page to try a dataset: paste and file make the same job as the API; what is wrong is said beside the form."""

import json

import httpx
import pytest

from service.settings import Settings
from service.web.pages.trying import as_csv
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
        ({"subject": "s", "table": ""}, "/table is empty"),
        ({"table": TABLE}, "/subject is missing"),
        ({"subject": "s", "table": "x,y\n1,2\n2,oops\n3,4"}, "line 3, column y"),
        ({"subject": "s", "table": "x,y\n1,2\n2,3"}, "at least 3 points"),
        ({"subject": "s", "table": "x,z\n1,2\n2,3\n3,4"}, "/z is not a known column"),
        ({"subject": "s", "table": TABLE, "max_degree": "13"}, "/max_degree"),
        ({"subject": "s", "table": TABLE, "weights": "magic"}, "/weights"),
        ({"subject": "s", "table": TABLE, "mpe_value": "-1"}, "/mpe_value"),
        ({"subject": "s", "table": TABLE, "mpe_value": "much"}, "/mpe_value"),
        ({"subject": "s", "table": TABLE, "plan_id": "none"}, "there is no plan none"),
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
    assert as_csv(b"1\t2\n3\t4\n") == b"x;y\n1;2\n3;4\n"
    assert as_csv(b"x,y\r\n1,2\r\n") == b"x,y\n1,2\n"
    assert as_csv(b"1,2\n") == b"x,y\n1,2\n"
