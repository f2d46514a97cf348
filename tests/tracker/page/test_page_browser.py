"""The page in a real browser: what a person does with mouse, keyboard and files, and what leaves the machine."""

from __future__ import annotations

import io
import json
import re
import shutil
import threading
from collections.abc import Iterator
from functools import partial
from http.server import SimpleHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

import cv2
import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from page_server import CHROMIUM, CHROMIUM_FLAGS, Server, wait_for
from playwright.sync_api import Browser, BrowserContext, Page, Route, expect, sync_playwright

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no Chromium is installed")

expect.set_options(timeout=20_000)
SIZES = ({"width": 1280, "height": 720}, {"width": 1013, "height": 767})


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


def open_result(page: Page, name: str = "bench A/clip") -> None:
    """Go from the list to a result and wait for its pictures."""
    page.locator("a.tile", has_text=name).first.click()
    expect(page.locator(".droplets tbody tr[data-droplet]").first).to_be_visible()
    expect(page.locator(".says")).to_be_hidden()


def rest_on(page: Page, frame: int) -> None:
    """Show a frame and wait until its full picture is drawn."""
    page.evaluate("frame => fallrise.view.player.go(frame)", frame)
    at_rest = "() => { const s = fallrise.view.stage.state; return s.half ? -1 : s.frame; }"
    assert wait_for(lambda: page.evaluate(at_rest) == frame, seconds=10)


def places(page: Page) -> list[dict[str, float]]:
    """Droplets in the shown frame: number, image place, page place."""
    found: list[dict[str, float]] = page.evaluate("""() => {
      const { stage } = fallrise.view, rect = stage.canvas.getBoundingClientRect();
      return [...stage.tracks.values()].flatMap((t) => {
        const row = t.frame.indexOf(stage.state.frame);
        if (row < 0) return [];
        const [sx, sy] = stage.toScreen(t.x[row], t.y[row]);
        const inside = sx > 25 && sy > 25 && sx < rect.width - 25 && sy < rect.height - 25;
        return inside ? [{ droplet: t.droplet, x: t.x[row], y: t.y[row], px: rect.left + sx, py: rect.top + sy }] : [];
      });
    }""")
    alone = lambda a: all(a is b or np.hypot(a["px"] - b["px"], a["py"] - b["py"]) > 45 for b in found)  # noqa: E731
    return [place for place in found if alone(place)]


def row_of(page: Page, droplet: int | float) -> str:
    """Selector of a droplet's row."""
    return f'.droplets tr[data-droplet="{int(droplet)}"]'


@pytest.mark.parametrize("size", SIZES)
@pytest.mark.parametrize("zoom", [1.0, 3.0])
def test_click_chooses_the_droplet_under_the_pointer(page: Page, size: dict[str, int], zoom: float) -> None:
    """At two window sizes and two zooms a click lands on the droplet's place within 0.1 px and chooses it."""
    page.set_viewport_size(size)
    rest_on(page, 60)
    if zoom > 1:
        page.evaluate("zoom => fallrise.view.stage.zoomBy(zoom)", zoom)
    shown = places(page)
    assert shown
    for place in shown:
        page.mouse.click(place["px"], place["py"])
        x, y = page.evaluate("fallrise.view.stage.lastClick")
        # The pointer's place comes in 1/64 css px or finer; a pixel of the picture is wider than one of them.
        assert np.hypot(x - place["x"], y - place["y"]) < 0.1
        assert page.evaluate("fallrise.view.chosen") == place["droplet"]
        expect(page.locator(row_of(page, place["droplet"]))).to_have_attribute("aria-selected", "true")


@pytest.mark.parametrize("size", SIZES)
@pytest.mark.parametrize("zoom", [1.0, 2.0])
def test_ring_lies_on_the_spot_on_the_screen(page: Page, size: dict[str, int], zoom: float) -> None:
    """In screenshots, the centre of each drawn ring is that of the droplet's light, on average within 0.1 px."""
    page.set_viewport_size(size)
    page.evaluate("fallrise.view.stage.trail = 0")
    apart = []
    for frame in (20, 60, 100):
        rest_on(page, frame)
        page.evaluate(
            "zoom => { const s = fallrise.view.stage; s.whole(); s.zoomBy(zoom); s.chosen = null; }", zoom
        )
        scale = page.evaluate("fallrise.view.stage.scale")
        shown = [
            p
            for p in places(page)
            if page.evaluate("d => fallrise.view.stage.verdicts.get(d)", p["droplet"]) == "keep"
        ]
        page.evaluate("() => { const s = fallrise.view.stage; s.marks = false; s.draw(); }")
        spots = screenshot(page)[:, :, 0].astype(float)
        page.evaluate(
            "() => { const s = fallrise.view.stage; s.marks = true; s.state = {...s.state, bitmap: null}; s.draw(); }"
        )
        drawn = screenshot(page).astype(float)
        rings = np.clip(
            drawn[:, :, 2] - drawn[:, :, 0] - 30, 0, None
        )  # blue beyond that of the empty picture
        for place in shown:
            light = centroid(spots, place["px"], place["py"], radius=5.5 * scale)
            ring = circle_centre(rings, place["px"], place["py"], radius=max(8, 9 * min(scale, 6)) + 3)
            apart.append((ring - light) / scale)
    offsets = np.array(apart)
    assert len(offsets) >= 6
    # A centroid on a noisy spot of this brightness scatters by about 0.15 px.
    assert np.abs(offsets.mean(axis=0)).max() < 0.1
    assert np.hypot(*offsets.T).max() < 0.6


def on_stage(page: Page, script: str) -> None:
    """Run a line of script on the stage, which it calls s."""
    page.evaluate(f"() => {{ const s = fallrise.view.stage; {script} }}")


def screenshot(page: Page) -> NDArray[np.uint8]:
    """What is on the screen, RGB."""
    data = np.frombuffer(page.screenshot(), np.uint8)
    return np.asarray(cv2.imdecode(data, cv2.IMREAD_COLOR)[:, :, ::-1], np.uint8)


def centroid(picture: NDArray[np.float64], x: float, y: float, *, radius: float) -> NDArray[np.float64]:
    """Centre of light against a place, in page pixels: pixel k spans k to k + 1; iterated, so that it is centred."""
    rows, columns = np.mgrid[: picture.shape[0], : picture.shape[1]] + 0.5
    at = np.array([x, y])
    for _ in range(6):
        away = np.hypot(columns - at[0], rows - at[1])
        rim = (away < radius) & (away > 0.75 * radius)
        weight = np.clip(picture - np.median(picture[rim]) - 6, 0, None) * (away < radius)
        at = np.array([(weight * columns).sum(), (weight * rows).sum()]) / weight.sum()
    return at - np.array([x, y])


def circle_centre(picture: NDArray[np.float64], x: float, y: float, *, radius: float) -> NDArray[np.float64]:
    """Centre, against a place, of the circle that fits the lit pixels best: the drawing's shades do not move it."""
    rows, columns = np.mgrid[: picture.shape[0], : picture.shape[1]] + 0.5
    u, v = columns - x, rows - y
    lit = (np.hypot(u, v) < radius) & (picture > 0)
    u, v, weight = u[lit], v[lit], np.sqrt(picture[lit])
    design = np.column_stack([2 * u, 2 * v, np.ones(len(u))])
    centre: NDArray[np.float64] = np.linalg.lstsq(
        design * weight[:, None], (u**2 + v**2) * weight, rcond=None
    )[0][:2]
    return centre


def test_picture_and_marks_are_of_one_frame_while_scrubbing(page: Page) -> None:
    """In every drawing during a fast drag, picture, marks, clock and playhead belong to one frame."""
    page.evaluate("""() => {
      const { frames, stage, player } = fallrise.view;
      window.seen = [];
      const before = stage.onDrawn;
      stage.onDrawn = (state) => {
        before(state);
        const key = [...frames.bitmaps].find(([, bitmap]) => bitmap === state.bitmap)?.[0];
        const clock = Number(player.clock.textContent.match(/frame (\\d+)/)[1]);
        window.seen.push([state.frame, stage.drawn, key ? Number(key.split('/')[1]) : null, clock]);
      };
    }""")
    box = page.locator(".timebar").bounding_box()
    assert box
    middle = box["y"] + box["height"] / 2
    page.mouse.move(box["x"] + 10, middle)
    page.mouse.down()
    for step in range(60):
        page.mouse.move(box["x"] + 10 + (box["width"] - 20) * abs(np.sin(step / 9)), middle)
    page.mouse.up()
    seen = page.evaluate("window.seen")
    assert len({frame for frame, *_ in seen}) > 15
    for frame, marks, picture, clock in seen:
        assert marks == clock == frame
        assert picture in (None, frame)


def test_picture_can_be_played_brightened_and_cleared(page: Page) -> None:
    """Play follows the recording's own time; brightness changes the picture and not the marks; the background goes."""
    rest_on(page, 40)
    place = places(page)[0]
    at = (int(place["py"]), int(place["px"]))
    on_stage(page, "s.marks = false; s.draw();")
    plain = screenshot(page).astype(int)
    page.get_by_role("slider", name="Brightness").fill("2")
    bright = screenshot(page).astype(int)
    # Brightness 2 doubles grey values up to white; the browser rounds to whole ones, before and after scaling.
    assert np.abs(bright[at] - np.minimum(255, 2 * plain[at])).max() <= 3
    on_stage(page, "s.marks = true; s.chosen = null; s.draw();")
    marked = screenshot(page).astype(int)
    ring = np.abs(marked - np.array([86, 180, 233])).max(axis=2) < 12  # pixels that a mark covers wholly
    assert ring.sum() > 50
    page.get_by_role("button", name="As recorded").click()
    page.get_by_role("button", name="Background off").click()
    wait_for(
        lambda: (screenshot(page).astype(int)[at[0] + 40 : at[0] + 60, at[1] - 10 : at[1] + 10, 0]).std() < 4
    )
    assert page.evaluate("fallrise.view.frames.clear")
    page.get_by_role("button", name="Background off").click()
    page.evaluate("fallrise.view.player.go(0)")
    began = page.evaluate("() => { fallrise.view.player.start(); return performance.now(); }")
    page.wait_for_timeout(1500)
    frame, now = page.evaluate(
        "() => { fallrise.view.player.stop(); return [fallrise.view.frames.wanted, performance.now()]; }"
    )
    # 20 frames a second of the recording; the browser's own clock tells how long it played, to a few drawings.
    assert frame == pytest.approx(20 * (now - began) / 1000, abs=4)


def test_rejection_holds_after_reload_and_can_be_undone(page: Page, server: Server) -> None:
    """Reject with a reason: table and charge unit change, a reload shows it, undo takes it back."""
    keep = page.locator(".droplets tr:has(.verdict.keep)").first
    number = keep.get_attribute("data-droplet")
    keep.click()
    expect(page.locator(".facts")).to_contain_text(re.compile(r"C \(own \d\S*, shared \d\S*\)"))
    before = page.evaluate("fallrise.view.result.charge_unit_text")
    reject = page.get_by_role("button", name="Reject", exact=True)
    reject.click()
    expect(page.locator("#outcome")).to_contain_text("reason")
    page.get_by_label("Reason", exact=True).fill("<i>two</i> droplets")
    reject.click()
    row = page.locator(f'.droplets tr[data-droplet="{number}"]')
    expect(row.locator(".verdict.reject")).to_be_visible()
    expect(page.locator("#outcome")).to_contain_text("evaluated again")
    assert page.evaluate("fallrise.view.result.charge_unit_text") != before
    page.reload()
    expect(row.locator(".verdict.reject")).to_be_visible()
    row.click()
    expect(page.locator(".facts")).to_contain_text("<i>two</i> droplets")
    held: list[Route] = []
    page.route("**/undo", lambda route: held.append(route))  # noqa: PLW0108 -- the driver marks the handler
    page.get_by_role("button", name="Undo").click()
    expect(page.locator("#outcome")).to_contain_text("Evaluating again")
    page.get_by_label("Reason", exact=True).fill("begun in the meantime")
    assert wait_for(lambda: page.evaluate("true") and held)
    held[0].continue_()
    expect(row.locator(".verdict.keep")).to_be_visible()
    expect(page.get_by_label("Reason", exact=True)).to_have_value("begun in the meantime")
    assert page.evaluate("fallrise.view.result.charge_unit_text") == before


def test_stale_window_is_told(page: Page, context: BrowserContext) -> None:
    """Of two windows, the one that shows an older state is told; its decision is not taken."""
    number = int(page.locator(".droplets tr[data-droplet]").first.get_attribute("data-droplet") or 0)
    other = context.new_page()
    other.goto(page.url)
    expect(other.locator(row_of(other, number))).to_be_visible()
    page.locator(row_of(page, number)).click()
    page.get_by_label("Reason", exact=True).fill("first")
    page.get_by_role("button", name="Doubt", exact=True).click()
    expect(page.locator(row_of(page, number) + " .verdict.doubt")).to_be_visible()
    other.get_by_label("Reason", exact=True).fill("second")
    other.get_by_role("button", name="Reject", exact=True).click()
    expect(other.locator(".notice.bad")).to_contain_text("changed elsewhere")
    other.get_by_role("button", name="Show what is there now").click()
    expect(other.locator(row_of(other, number) + " .verdict.doubt")).to_be_visible()
    other.get_by_role("button", name="Undo").click()
    expect(other.locator(row_of(other, number) + " .verdict.doubt")).to_have_count(0)


def test_keyboard_alone_is_enough(context: BrowserContext, server: Server) -> None:
    """From the list to a rejection with a reason and its undo, without the mouse."""
    page = context.new_page()
    page.goto(server.address)
    expect(page.locator("a.tile").first).to_be_visible()
    tab_to(page, "a.tile")
    page.keyboard.press("Enter")
    expect(page.locator(".droplets tbody tr[data-droplet]").first).to_be_visible()
    expect(page.locator(".says")).to_be_hidden()
    tab_to(page, ".stage")
    for key in ("End", "Home", "Shift+ArrowRight", "ArrowRight"):
        page.keyboard.press(key)
    assert page.evaluate("fallrise.view.frames.wanted") == 11
    page.keyboard.press("+")
    page.keyboard.press("Alt+ArrowLeft")
    assert page.evaluate("fallrise.view.stage.zoom") > 1
    page.keyboard.press("0")
    tab_to(page, ".droplets tbody tr")
    page.keyboard.press("Home")
    page.keyboard.press("ArrowDown")
    chosen = page.evaluate("fallrise.view.chosen")
    assert page.evaluate("document.activeElement.dataset.droplet") == str(chosen)
    page.keyboard.press("r")
    page.keyboard.type("seen with the keyboard")
    tab_to(page, "button:text-is('Reject')")
    page.keyboard.press("Enter")
    expect(page.locator(row_of(page, chosen) + " .verdict.reject")).to_be_visible()
    expect(page.get_by_role("button", name="Reject", exact=True)).to_be_focused()
    page.keyboard.press("Escape")
    tab_to(page, "#tab-motion")
    page.keyboard.press("End")
    expect(page.locator("#panel-history")).to_contain_text("seen with the keyboard")
    page.keyboard.press("u")
    expect(page.locator(row_of(page, chosen) + " .verdict.reject")).to_have_count(0)


def tab_to(page: Page, selector: str) -> None:
    """Press Tab until an element has the focus; 80 stops at most."""
    for _ in range(80):
        page.keyboard.press("Tab")
        if page.evaluate("s => document.activeElement.matches(s.replace(/:text-is.*$/, ''))", selector):
            wanted = re.search(r"text-is\('(.*)'\)", selector)
            if wanted is None or page.evaluate("document.activeElement.textContent") == wanted[1]:
                return
    raise AssertionError(f"Tab never reaches {selector}")


def test_dropped_recording_reaches_its_table(context: BrowserContext, server: Server, measured: Path) -> None:
    """A recording and its bench file dropped on the page come out measured; a name with markup stays text."""
    page = context.new_page()
    page.on("dialog", lambda _: pytest.fail("a file name ran as a script"))
    page.goto(server.address)
    expect(page.locator(".drop")).to_be_visible()
    files = [
        {
            "name": "<img src=x onerror=alert(1)>.avi",
            "type": "video/x-msvideo",
            "file": measured / "clip.avi",
        },
        {"name": "bench.toml", "type": "text/plain", "file": measured / "bench.toml"},
    ]
    handed = [
        {"name": f["name"], "type": f["type"], "bytes": list(Path(f["file"]).read_bytes())} for f in files
    ]
    page.evaluate(
        """(files) => {
      const data = new DataTransfer();
      for (const f of files) data.items.add(new File([new Uint8Array(f.bytes)], f.name, { type: f.type }));
      const how = { dataTransfer: data, bubbles: true, cancelable: true };
      document.querySelector(".drop").dispatchEvent(new DragEvent("drop", how));
    }""",
        handed,
    )
    expect(page.locator(".files .leaf").first).to_have_text("<img src=x onerror=alert(1)>.avi")
    page.get_by_role("button", name="Measure", exact=True).click()
    expect(page.locator(".droplets tbody tr[data-droplet]").first).to_be_visible(timeout=60_000)
    table = pd.read_csv(measured / "clip.fallrise" / "droplets.csv")
    assert page.locator(".droplets tbody tr[data-droplet]").count() == len(table)
    page.goto(server.base)
    expect(page.locator(".jobs")).to_contain_text("<img src=x")


def test_form_shows_each_error_beside_its_field(
    context: BrowserContext, server: Server, measured: Path
) -> None:
    """Without a bench file a form asks for it; wrong fields are marked, tied to their message, and focused."""
    page = context.new_page()
    page.goto(server.address)
    page.set_input_files("#files", str(measured / "clip.avi"))
    page.get_by_label("Plate gap").fill("6 V")
    page.get_by_role("button", name="Measure", exact=True).click()
    gap = page.get_by_label("Plate gap")
    expect(gap).to_have_attribute("aria-invalid", "true")
    expect(gap).to_be_focused()
    told = (gap.get_attribute("aria-describedby") or "").split()[0]
    expect(page.locator(f"#{told}")).to_contain_text("length")
    expect(page.get_by_label("Oil density")).to_have_attribute("aria-invalid", "true")
    expect(page.locator("form > .error")).to_contain_text("fields need another look.")
    too_large = page.evaluate("""async () => {
      const { ShelfView } = await import("/static/shelf.js");
      const view = fallrise.view;
      view.intake.shelf.limit = 10;
      view.intake.take([new File(["x".repeat(20)], "big.avi")]);
      return view instanceof ShelfView && view.intake.error.textContent;
    }""")
    assert "too large" in too_large


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


def violations(page: Page) -> list[str]:
    """Rules that axe-core finds broken on the page as it is now."""
    import axe_playwright_python

    page.evaluate((Path(axe_playwright_python.__file__).parent / "axe.min.js").read_text(encoding="utf-8"))
    told = page.evaluate(
        "axe.run(document).then((r) => r.violations.map((v) => `${v.id}: ${v.nodes[0].html.slice(0, 120)}`))"
    )
    return [str(line) for line in told]


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


def test_list_filters_by_reason_and_shows_the_worst_first(page: Page, server: Server) -> None:
    """With the order 'worst first' the tracks that are not kept lead the list and open where they lie."""
    number = int(page.locator(".droplets tr[data-droplet]").nth(1).get_attribute("data-droplet") or 0)
    page.locator(row_of(page, number)).click()
    page.get_by_label("Reason", exact=True).fill("for the list")
    page.get_by_role("button", name="Reject", exact=True).click()
    expect(page.locator(row_of(page, number) + " .verdict.reject")).to_be_visible()
    page.locator(".word").click()
    page.get_by_label("Order").select_option("worst")
    page.get_by_label("With reason").select_option("decided")
    expect(page.locator(".worst tbody tr")).to_have_count(1)
    page.locator(".worst tbody a").click()
    expect(page.locator(row_of(page, number))).to_have_attribute("aria-selected", "true")
    page.get_by_role("button", name="Undo").click()
    expect(page.locator(row_of(page, number) + " .verdict.reject")).to_have_count(0)


def test_downloads_hold_what_their_names_say(page: Page) -> None:
    """The frame comes as a PNG of the recording's size, the report as one page that asks nobody."""
    page.get_by_role("button", name="Export").click()
    with page.expect_download() as download:
        page.get_by_role("link", name=re.compile("This frame")).click()
    data = Path(download.value.path()).read_bytes()
    assert cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_COLOR).shape == (240, 320, 3)
    assert io.BytesIO(data).read(8) == b"\x89PNG\r\n\x1a\n"
    assert download.value.suggested_filename.endswith("_frame_0.png")


def test_colours_and_shapes_are_those_of_the_command() -> None:
    """The page's marks have the colours of `tracker.showing.overlay`."""
    from importlib import resources

    from tracker.showing.overlay import COLOURS

    text = (resources.files("tracker.page") / "static" / "stage.js").read_text(encoding="utf-8")
    found = re.search(r"COLOURS = (\{.*?\});", text)
    assert found
    page = json.loads(re.sub(r"(\w+):", r'"\1":', found[1]))
    assert page == {verdict: "#{2:02x}{1:02x}{0:02x}".format(*bgr) for verdict, bgr in COLOURS.items()}
