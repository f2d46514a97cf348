"""The page as a whole in a real browser: other origins, accessibility, small windows and large text."""

from __future__ import annotations

import threading
from functools import partial
from http.server import SimpleHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

import pytest
from page_browser import violations
from page_server import CHROMIUM, Server, wait_for
from playwright.sync_api import Browser, BrowserContext, Page, expect

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no Chromium is installed")


EVIL = """<body><img id=i src="BASE/static/mark.svg"><script>
  window.out = {};
  document.getElementById("i").onload = () => { out.picture = true; };
  const read = fetch("BASE/api/shelf", { credentials: "include" }).then((r) => r.text());
  const write = fetch("BASE/api/measure", { method: "POST", mode: "no-cors", credentials: "include", body: "{}" });
  Promise.all([read.then((t) => { out.read = t; }, () => { out.read = null; }), write.catch(() => 0)])
    .then(() => { out.done = true; });
</script>"""
FRAMED = """(address) => new Promise((done) => {
  const frame = document.createElement("iframe");
  frame.onload = () => {
    try { done(frame.contentDocument && frame.contentDocument.body.innerText); } catch { done(null); }
  };
  frame.src = address;
  document.body.append(frame);
})"""


def test_another_origin_can_neither_read_nor_change(browser: Browser, server: Server, tmp_path: Path) -> None:
    """A page of another program on this machine, in the same browser, gets nothing and changes nothing."""
    (tmp_path / "evil.html").write_text(EVIL.replace("BASE/", server.base))
    handler = partial(QuietHandler, directory=str(tmp_path))
    with ThreadingHTTPServer(("127.0.0.1", 0), handler) as foreign:
        threading.Thread(target=foreign.serve_forever, daemon=True).start()
        context = browser.new_context()
        own = context.new_page()
        own.goto(server.address)
        expect(own.locator(".word")).to_be_visible()
        jobs = "fetch('/api/jobs').then((r) => r.json())"
        before = own.evaluate(jobs)
        asked: list[str] = []
        statuses: dict[str, int] = {}
        evil = context.new_page()
        evil.on("request", lambda r: asked.append(r.url) if r.url.startswith(server.base) else None)
        evil.on(
            "response",
            lambda r: statuses.update({r.url: r.status}) if r.url.startswith(server.base) else None,
        )
        evil.goto(f"http://127.0.0.1:{foreign.server_address[1]}/evil.html")
        assert wait_for(lambda: evil.evaluate("window.out.done"), seconds=10)
        assert evil.evaluate("window.out.read") is None
        assert not evil.evaluate("window.out.picture")
        assert len(asked) == 3
        assert set(statuses.values()) <= {
            403
        }  # the browser hides answers that the policy keeps from other origins
        assert len(own.evaluate(jobs)) == len(before)
        frame = evil.evaluate(FRAMED, server.base)
        assert not frame
        context.close()
        foreign.shutdown()


class QuietHandler(SimpleHTTPRequestHandler):
    """File server that writes no log."""

    def log_message(self, *_: object) -> None:
        """Say nothing."""


def test_axe_finds_no_violation(page: Page, context: BrowserContext, server: Server, measured: Path) -> None:
    """axe-core finds no violation on the result, its tabs and dialogs, the list, and the form with errors."""
    found = {}
    for tab in ("motion", "number", "charges", "crops", "history"):
        page.locator(f"#tab-{tab}").click()
        found[tab] = violations(page)
    page.keyboard.press("?")
    found["keys"] = violations(page)
    page.keyboard.press("Escape")
    page.get_by_role("button", name="Export").click()
    found["export"] = violations(page)
    page.keyboard.press("Escape")
    start = context.new_page()
    start.goto(server.base)
    expect(start.locator("a.tile").first).to_be_visible()
    start.set_input_files("#files", str(measured / "clip.avi"))
    start.get_by_role("button", name="Measure", exact=True).click()
    expect(start.get_by_label("Plate gap")).to_have_attribute("aria-invalid", "true")
    found["start"] = violations(start)
    assert {place: told for place, told in found.items() if told} == {}


@pytest.mark.parametrize(("size", "text"), [((1280, 720), 100), ((1280, 720), 200), ((800, 600), 100)])
def test_page_fits_small_windows_and_large_text(page: Page, size: tuple[int, int], text: int) -> None:
    """At 1280 x 720, at twice the text size and in a small window nothing is cut off sideways or unreachable."""
    page.set_viewport_size({"width": size[0], "height": size[1]})
    page.evaluate("share => { document.documentElement.style.fontSize = `${share}%`; }", text)
    assert page.evaluate("document.scrollingElement.scrollWidth") <= size[0]
    assert (
        page.evaluate(
            "document.querySelector('main').scrollWidth - document.querySelector('main').clientWidth"
        )
        <= 1
    )
    for name in ("Reject", "Split", "Play", "Export"):
        button = page.get_by_role("button", name=name, exact=True)
        button.scroll_into_view_if_needed()
        box = button.bounding_box()
        assert box
        assert box["x"] >= 0
        assert box["x"] + box["width"] <= size[0]
        assert box["y"] + box["height"] <= size[1]
    stage = page.locator(".stage").bounding_box()
    assert stage
    assert stage["height"] >= 160


def test_a_result_named_on_the_command_line_is_opened(
    context: BrowserContext, measured: Path, tmp_path: Path
) -> None:
    """The address that is printed for a single result opens its droplets; the list is one step away."""
    with Server(measured / "clip.fallrise", tmp_path / "results", cache=tmp_path / "cache") as alone:
        visit = context.browser.new_context() if context.browser else context
        page = visit.new_page()
        page.goto(alone.address)
        expect(page.locator(".droplets tbody tr[data-droplet]").first).to_be_visible()
        page.locator(".word").click()
        expect(page.locator("a.tile")).to_have_count(1)
        visit.close()
