"""What people do with the pages, in a real browser: post, watch, filter, open, print, sign in; by keyboard too."""

import io
import re
from datetime import UTC, datetime

import pytest
from playwright.sync_api import Page, expect
from pypdf import PdfReader

from service.workflows.callers import create_key
from tests.browser.conftest import Opener
from tests.browser.scene import put
from tests.web.examples import BOWED, DATASET, PLAN
from tests.web.service import Service

pytestmark = pytest.mark.long
TABLE = "\n".join(["x,y", *(f"{x},{y}" for x, y in zip(BOWED["x"], BOWED["y"], strict=True))])


def test_paste_watch_it_finish_and_read_the_verdict(service: Service, open_page: Opener):
    page = open_page(service)
    page.goto("/try")
    page.get_by_label("Subject: the instrument or method").fill("bridge 7")
    page.get_by_label(re.compile("Table, pasted")).fill(TABLE)
    page.get_by_role("button", name="Fit and select").click()
    expect(page.get_by_role("status")).to_have_text("Waits for a worker.")
    with service.working():
        expect(page.get_by_role("heading", level=2).first).to_contain_text("degree 2, quadratic", timeout=20_000)
    for name in ("curve", "unseen"):
        image = page.locator(f"#figure-{name} img")
        image.scroll_into_view_if_needed()
        expect(image).to_have_js_property("complete", value=True, timeout=20_000)
        assert image.evaluate("one => one.naturalWidth") > 300
        assert "degree 2" in str(image.get_attribute("alt")) or name == "unseen"


def test_the_history_updates_by_itself(service: Service, open_page: Opener):
    page = open_page(service)
    page.goto("/history")
    expect(page.get_by_role("heading", name="No jobs yet")).to_be_visible()
    job = put(service)
    row = page.locator("tr", has=page.locator(f"#job-{job}"))
    expect(row).to_contain_text("queued", timeout=10_000)
    page.locator(f"#job-{job}").focus()
    service.work()
    expect(row).to_contain_text("succeeded", timeout=10_000)
    expect(page.locator(f"#job-{job}")).to_be_focused()


def test_a_service_that_goes_away_is_said_so(service: Service, open_page: Opener):
    page = open_page(service)
    put(service)
    page.goto("/history")
    page.route("**/history*", lambda route: route.abort())
    expect(page.get_by_role("status")).to_contain_text("does not answer", timeout=10_000)
    page.unroute("**/history*")
    expect(page.get_by_role("status")).to_have_text("Updates by itself.", timeout=20_000)


def test_filter_page_and_open(service: Service, open_page: Opener):
    for _ in range(55):
        put(service)
    done = put(service, DATASET, plan=PLAN, priority=1)
    service.desk.work_once()
    page = open_page(service)
    page.goto("/history")
    expect(page.locator("tbody tr")).to_have_count(50)
    page.get_by_role("link", name="Older jobs").click()
    expect(page.locator("tbody tr")).to_have_count(6)
    page.get_by_role("link", name="Newest jobs").click()
    page.get_by_label("Verdict").select_option("adequate")
    page.get_by_role("button", name="Filter").click()
    expect(page.locator("tbody tr")).to_have_count(1)
    page.locator(f"#job-{done}").click()
    expect(page.get_by_role("heading", level=1)).to_have_text(DATASET["subject"])
    page.get_by_role("link", name=DATASET["subject"]).click()
    expect(page.get_by_role("heading", name="Verdicts over time")).to_be_visible()


def test_cancel(service: Service, open_page: Opener):
    job = put(service)
    page = open_page(service)
    page.goto(f"/job/{job}")
    page.get_by_role("button", name="Cancel this job").click()
    expect(page.get_by_text("Was called off before it ended.")).to_be_visible()
    assert service.http.get(f"/v1/jobs/{job}").json()["state"] == "cancelled"


def test_the_report_prints_on_two_pages(service: Service, open_page: Opener):
    job = put(service, DATASET, plan=PLAN)
    service.work()
    page = open_page(service)
    page.goto(f"/job/{job}/report")
    loaded(page)
    printed = PdfReader(io.BytesIO(page.pdf(prefer_css_page_size=True)))
    text = re.sub(r"\s+", " ", " ".join(one.extract_text() for one in printed.pages))
    assert len(printed.pages) == 2
    width, height = printed.pages[0].mediabox[2:]
    assert (round(float(width)), round(float(height))) == (595, 842)
    verdict = service.http.get(f"/v1/jobs/{job}/verdict")
    assert verdict.headers["etag"][1:-1] in text.replace(" ", "")
    assert "Never extrapolate beyond the calibrated range." in text
    assert "Back to the job" not in text


def test_a_wrong_key_then_the_right_one(service: Service, open_page: Opener):
    key, _ = create_key(service.database, name="quality", role="read", now=datetime.now(UTC))
    page = open_page(service, allowed=(200, 303, 304, 307, 401))
    page.goto("/queue")
    expect(page.get_by_role("heading", level=1)).to_have_text("Sign in")
    page.get_by_label("Key").fill("lbk_wrong")
    page.get_by_role("button", name="Sign in").click()
    expect(page.get_by_role("alert")).to_contain_text("not known, or was revoked")
    expect(page.get_by_label("Key")).to_have_attribute("aria-invalid", "true")
    page.get_by_label("Key").fill(key)
    page.keyboard.press("Enter")
    expect(page.get_by_role("heading", level=1)).to_have_text("Queue")
    assert page.evaluate("document.cookie") == ""
    page.get_by_role("button", name="Sign out").click()
    expect(page.get_by_role("heading", level=1)).to_have_text("Sign in")


def test_keyboard_only(service: Service, open_page: Opener):
    job = put(service, DATASET, plan=PLAN)
    put(service, BOWED)
    service.work()
    page = open_page(service)
    page.goto("/history")
    page.keyboard.press("Tab")
    expect(page.get_by_role("link", name="Skip to the content")).to_be_focused()
    expect(page.get_by_role("link", name="Skip to the content")).to_be_in_viewport()
    page.keyboard.press("Enter")
    expect(page.locator("main")).to_be_focused()
    page.keyboard.press("Tab")
    expect(page.get_by_label("Subject")).to_be_focused()
    assert page.evaluate("getComputedStyle(document.activeElement).outlineStyle") == "solid"
    page.keyboard.type(DATASET["subject"])
    page.keyboard.press("Enter")
    expect(page.locator("tbody tr")).to_have_count(1)
    page.keyboard.press("Tab")
    tab_to(page, f"job-{job}")
    page.keyboard.press("Enter")
    expect(page.get_by_role("heading", level=1)).to_have_text(DATASET["subject"])
    for _ in range(200):
        page.keyboard.press("Tab")
        if page.evaluate("document.activeElement.getAttribute('aria-labelledby')") == "candidates":
            break
    else:
        pytest.fail("the wide table cannot be reached, so it cannot be scrolled by keyboard")


def test_without_scripts_everything_is_there(service: Service, open_page: Opener):
    page = open_page(service, java_script_enabled=False)
    page.goto("/try")
    page.get_by_label("Subject: the instrument or method").fill("no script")
    page.get_by_label(re.compile("Table, pasted")).fill(TABLE)
    page.get_by_role("button", name="Fit and select").click()
    service.work()
    page.reload()
    assert "degree 2, quadratic" in page.locator("h2").first.inner_text()


def test_a_figure_opened_by_itself_is_drawn_with_its_styles(service: Service, open_page: Opener):
    job = put(service)
    service.work()
    page = open_page(service)
    page.goto(f"/v1/jobs/{job}/figures/curve.svg")
    line = page.evaluate("getComputedStyle(document.querySelector('#curve path')).stroke")
    assert line == "rgb(20, 89, 107)"
    assert page.evaluate("document.querySelector('desc').textContent").startswith("10 points of y against x")


def tab_to(page: Page, element: str, *, most: int = 60) -> None:
    """Press Tab until the element with this id has the focus."""
    for _ in range(most):
        if page.evaluate("document.activeElement.id") == element:
            return
        page.keyboard.press("Tab")
    pytest.fail(f"{element} cannot be reached by Tab")


def loaded(page: Page) -> None:
    """Wait until every image is there, lazy ones too."""
    for image in page.locator("img").all():
        image.scroll_into_view_if_needed()
        expect(image).to_have_js_property("complete", value=True, timeout=20_000)
