"""Debian's Chromium, driven by Playwright. Where there is none, these tests are skipped and say so.

With LEASTBEND_REQUIRE_BROWSER=1 they fail instead. LEASTBEND_TEST_BROWSER names another executable.
"""

import os
import shutil
from collections.abc import Callable, Iterator
from typing import Any

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, sync_playwright

from service.settings import Settings
from tests.web.service import Service, running

FLAGS = [
    "--no-sandbox",  # as root, which CI is
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]
DESKTOP, PHONE = {"width": 1200, "height": 800}, {"width": 320, "height": 640}


@pytest.fixture(scope="package")
def browser() -> Iterator[Browser]:
    """One browser for all tests here; each page has a context of its own.

    Not for the session: while it is open, an event loop runs in this thread, and other tests start their own.
    """
    path = os.environ.get("LEASTBEND_TEST_BROWSER") or shutil.which("chromium") or shutil.which("chromium-browser")
    if path is None:
        if os.environ.get("LEASTBEND_REQUIRE_BROWSER") == "1":
            pytest.fail("a browser is required here, and there is no chromium in PATH", pytrace=False)
        pytest.skip("no chromium in PATH (Debian: apt-get install chromium)")
    with sync_playwright() as playwright:
        opened = playwright.chromium.launch(executable_path=path, args=FLAGS)
        yield opened
        opened.close()


@pytest.fixture
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    """A service on an empty data directory; its worker works only when told to."""
    with running(Settings(data_dir=tmp_path_factory.mktemp("browser") / "data")) as one:
        yield one


Opener = Callable[..., Page]


@pytest.fixture
def open_page(browser: Browser) -> Iterator[Opener]:
    """Opens a page on a service; at the end nothing may have been refused, failed or asked of another host."""
    contexts: list[BrowserContext] = []
    trouble: list[str] = []

    def opened(service: Service, *, allowed: tuple[int, ...] = (200, 303, 304, 307), **options: Any) -> Page:
        context = browser.new_context(base_url=service.address, **{"viewport": DESKTOP} | options)
        contexts.append(context)
        page = context.new_page()
        page.on("pageerror", lambda error: trouble.append(f"script: {error}"))
        page.on("console", lambda said: trouble.append(said.text) if _is_refusal(said.text) else None)
        page.on("request", lambda one: trouble.append(f"foreign: {one.url}") if _is_foreign(one.url, service) else None)
        page.on(
            "response",
            lambda one: trouble.append(f"{one.status} {one.url}") if one.status not in allowed else None,
        )
        return page

    yield opened
    for context in contexts:
        context.close()
    assert trouble == []


def _is_refusal(text: str) -> bool:
    return "Content Security Policy" in text or "Refused to" in text


def _is_foreign(url: str, service: Service) -> bool:
    return not url.startswith((service.address, "data:", "blob:"))
