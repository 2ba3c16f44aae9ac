"""Every page by axe-core, light and dark, wide and 320 px; and nothing wider than the screen."""

import io
from collections.abc import Iterator
from typing import Literal

import pytest
from axe_playwright_python.sync_playwright import Axe
from PIL import Image
from playwright.sync_api import Locator

from service.settings import Settings
from tests.browser.conftest import DESKTOP, PHONE, Opener
from tests.browser.scene import scene
from tests.web.service import Service, running

pytestmark = pytest.mark.long
FOUND = (200, 303, 304, 307, 404, 422)
NARROWEST_FIGURE = 270

Shown = tuple[Service, dict[str, str]]


@pytest.fixture(scope="module")
def shown(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Shown]:
    """One service with one of everything, and the addresses of its pages: these tests only look."""
    with running(Settings(data_dir=tmp_path_factory.mktemp("shown") / "data")) as service:
        yield service, scene(service).addresses


@pytest.mark.parametrize(("scheme", "screen"), [("light", "desktop"), ("dark", "desktop"), ("light", "phone")])
def test_no_violations_on_any_page(shown: Shown, open_page: Opener, scheme: Literal["light", "dark"], screen: str):
    service, addresses = shown
    page = open_page(service, allowed=FOUND, color_scheme=scheme, viewport=PHONE if screen == "phone" else DESKTOP)
    axe = Axe()
    violations = {}
    for name, address in addresses.items():
        page.goto(address)
        found = axe.run(page)
        assert found.response["passes"], name
        if found.violations_count:
            violations[name] = [
                (one["id"], [node["html"][:120] for node in one["nodes"][:3]]) for one in found.response["violations"]
            ]
    assert violations == {}


@pytest.mark.parametrize("width", [320, 768, 1200])
def test_nothing_is_wider_than_the_screen(shown: Shown, open_page: Opener, width: int):
    service, addresses = shown
    page = open_page(service, allowed=FOUND, viewport={"width": width, "height": 640})
    for name, address in addresses.items():
        page.goto(address)
        assert page.evaluate("document.documentElement.scrollWidth") <= width, name
        for image in page.locator("figure img").all():
            box = image.bounding_box()
            assert box is not None
            assert NARROWEST_FIGURE <= box["width"] <= width, name


def test_tables_of_the_report_fit_a_wide_screen(shown: Shown, open_page: Opener):
    service, addresses = shown
    page = open_page(service, viewport={"width": 1280, "height": 800})
    page.goto(addresses["report"])
    tables = page.locator(".wide").all()
    assert len(tables) >= 3
    for table in tables:
        assert table.evaluate("one => one.scrollWidth <= one.clientWidth")


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_a_table_that_goes_on_is_shaded_where_it_does(
    shown: Shown, open_page: Opener, scheme: Literal["light", "dark"]
):
    service, addresses = shown
    page = open_page(service, viewport=PHONE, color_scheme=scheme)
    page.goto(addresses["report"])
    table = page.locator(".wide[aria-labelledby=candidates]")
    assert table.evaluate("one => one.scrollWidth > one.clientWidth")
    paper = _edge(table, "left")
    assert _edge(table, "right") != paper
    table.evaluate("one => { one.scrollLeft = one.scrollWidth }")
    assert _edge(table, "left") != paper
    assert _edge(table, "right") == paper


def _edge(table: Locator, side: Literal["left", "right"]) -> tuple[int, ...]:
    """Colour of the last pixel of the table's head at one side."""
    picture = Image.open(io.BytesIO(table.screenshot())).convert("RGB")
    found = picture.getpixel((1 if side == "left" else picture.width - 2, 2))
    assert isinstance(found, tuple)
    return found


def test_text_can_be_doubled_in_size(shown: Shown, open_page: Opener):
    """WCAG 2.2, 1.4.4 and 1.4.10: at twice the text size nothing is cut off."""
    service, addresses = shown
    page = open_page(service, allowed=FOUND, viewport={"width": 640, "height": 640})
    for name, address in addresses.items():
        page.goto(address)
        page.evaluate("document.documentElement.style.fontSize = '200%'")
        assert page.evaluate("document.documentElement.scrollWidth") <= 640, name
