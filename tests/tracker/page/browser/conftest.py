"""A browser, the command in a process of its own, and a signed-in visit for the tests of this folder."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from page_browser import SIZES, open_result
from page_server import CHROMIUM, CHROMIUM_FLAGS, Server
from playwright.sync_api import Browser, BrowserContext, Page, sync_playwright


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    """One browser for all tests of this file."""
    with sync_playwright() as driver:
        opened = driver.chromium.launch(executable_path=CHROMIUM, args=CHROMIUM_FLAGS)
        yield opened
        opened.close()


@pytest.fixture(scope="module")
def server(measured: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Server]:
    """The command in a process of its own, on a copy of the measured recording."""
    home = tmp_path_factory.mktemp("inspected")
    shutil.copytree(measured, home / "term" / "bench A")
    with Server(home / "term", home / "results", cache=home / "cache") as running:
        yield running


@pytest.fixture
def context(browser: Browser, server: Server) -> Iterator[BrowserContext]:
    """Signed-in visit; any request to another address fails the test."""
    made = browser.new_context(viewport=SIZES[0])
    made.set_default_timeout(20_000)
    asked: list[str] = []
    made.on("request", lambda request: asked.append(request.url))
    yield made
    outside = [url for url in asked if not url.startswith((server.base, "blob:", "data:"))]
    made.close()
    assert outside == []


@pytest.fixture
def page(context: BrowserContext, server: Server) -> Iterator[Page]:
    """Page on the result, its pictures ready; an error in the script fails the test."""
    errors: list[str] = []
    opened = context.new_page()
    opened.on("pageerror", lambda error: errors.append(str(error)))
    opened.on(
        "console", lambda said: errors.append(said.text) if "Content Security Policy" in said.text else None
    )
    opened.goto(server.address)
    open_result(opened)
    yield opened
    assert errors == []
