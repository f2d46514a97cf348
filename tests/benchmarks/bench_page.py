"""How fast and how heavy the inspection page is, in a real browser, on a long recording with many droplets.

Writes `page.md` beside this file. Run as ``python tests/benchmarks/bench_page.py [--result FOLDER]``; without a
result it simulates and measures 60 s of 1280 x 960 with 40 droplets first, which takes a few minutes. Rates are
drawings in which picture and marks changed, per second of wall time; everything shares the machine's cores.
"""

from __future__ import annotations

import argparse
import os
import sys
import tempfile
import time
from itertools import pairwise
from pathlib import Path
from typing import Any

import psutil
from playwright.sync_api import Page, expect, sync_playwright

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE.parent / "helpers"), str(HERE.parents[1])]

from page_server import CHROMIUM, CHROMIUM_FLAGS, Server, wait_for  # noqa: E402

from tracker.measure import measure  # noqa: E402
from tracker.simulate import Scene, simulate, write_bench  # noqa: E402

Row = tuple[str, str]
WINDOW = {"width": 1600, "height": 1000}
SECONDS = 5.0  # of each drag

COUNTER = """() => {
  const { stage } = fallrise.view, before = stage.onDrawn;
  window.drawn = [];
  stage.onDrawn = (state) => { before(state); drawn.push([performance.now(), state.frame, !!state.bitmap]); };
}"""
DRAG = """([seconds, period]) => new Promise((done) => {
  const bar = document.querySelector(".timebar"), box = bar.getBoundingClientRect(), began = performance.now();
  const where = { clientY: box.top + 9, pointerId: 1, button: 0, bubbles: true };
  const point = (kind, x) => bar.dispatchEvent(new PointerEvent(kind, { ...where, clientX: x }));
  bar.setPointerCapture = () => {};
  window.drawn.length = 0;
  point("pointerdown", box.left + 10);
  const step = () => {
    const t = (performance.now() - began) / 1000;
    if (t > seconds) { point("pointerup", box.left + 10); done(); return; }
    const share = Math.abs(((2 * t) / period) % 2 - 1);
    point("pointermove", box.left + 10 + (box.width - 20) * (1 - share));
    setTimeout(step, 16);
  };
  step();
})"""


CHANGED = "before => fallrise.view.result.revision !== before"


def made_result(folder: Path) -> Path:
    """Simulate and measure the recording that everything is timed on."""
    scene = Scene(
        droplets=46, seconds=60.0, width=1280, height=960, frame_rate=25.0, metres_per_pixel=2e-6,
        voltages=(0.0, 260.0, 0.0, -260.0),
    )  # fmt: skip
    recording = simulate(scene, folder / "clip.avi", seed=3).recording
    write_bench(scene, folder / "bench.toml", recording=recording)
    return Path(str(measure(recording).folder))


def opened(page: Page, server: Server) -> tuple[float, float]:
    """Seconds from the click on a recording until picture, marks and table are there, and until all pictures are."""
    page.goto(server.address)
    expect(page.locator("a.tile").first).to_be_visible(timeout=60_000)
    began = time.perf_counter()
    page.locator("a.tile").first.click()
    there = "() => !!(window.fallrise.view.stage?.state.bitmap && document.querySelector('.droplets tr[data-droplet]'))"
    wait_for(lambda: page.evaluate(there), seconds=60)
    first = time.perf_counter() - began
    expect(page.locator(".says")).to_be_hidden(timeout=600_000)
    return first, time.perf_counter() - began


def rate(page: Page) -> tuple[float, float]:
    """Pictures a second since the counter was emptied, and the share of drawings without their own picture."""
    seen: list[list[Any]] = page.evaluate("window.drawn")
    span = (seen[-1][0] - seen[0][0]) / 1000 if len(seen) > 1 else float("inf")
    pictures = sum(a[1] != b[1] and bool(b[2]) for a, b in pairwise(seen))
    return pictures / span, sum(not entry[2] for entry in seen) / max(1, len(seen))


def scrubbing(page: Page) -> list[Row]:
    """Drags over the bar of time, playing, and an arrow key held down."""
    rows = []
    page.evaluate(COUNTER)
    for name, period in (("drag over the whole bar in 1 s", 2.0), ("drag over the whole bar in 20 s", 40.0),
                         ("the fast drag again", 2.0)):  # fmt: skip
        page.evaluate(DRAG, [SECONDS, period])
        pictures, bare = rate(page)
        rows.append(
            (f"{name}: pictures a second", f"{pictures:.0f} ({bare:.0%} of drawings without picture)")
        )
    page.locator(".stage").focus()
    page.evaluate("() => { fallrise.view.player.go(0); window.drawn.length = 0; }")
    page.keyboard.press("Space")
    page.wait_for_timeout(SECONDS * 1000)
    page.keyboard.press("Space")
    rows.append(("playing 25 frames a second: pictures a second", f"{rate(page)[0]:.1f}"))
    page.evaluate("() => { window.drawn.length = 0; }")
    began = time.perf_counter()
    while time.perf_counter() - began < SECONDS:
        page.keyboard.press("ArrowRight")
    rows.append(("arrow key, as fast as the driver presses it: pictures a second", f"{rate(page)[0]:.0f}"))
    return rows


def deciding(page: Page) -> list[Row]:
    """A rejection and a split, each until the new table is shown, and taken back."""
    rows = []
    expect(page.locator("#panel-number")).to_have_count(1)
    page.locator("#tab-number").click()
    expect(page.locator("#panel-number .caption")).not_to_contain_text("worked out", timeout=120_000)
    for name, button in (("reject", "Reject"), ("split", "Split")):
        page.locator(".droplets tr[data-droplet]").nth(2).click()
        page.evaluate("() => fallrise.view.player.go(700)")
        page.get_by_label("Reason", exact=True).fill("timed")
        for step, press in ((name, button), (f"undo of the {name}", "Undo")):
            before = str(page.evaluate("fallrise.view.result.revision"))
            began = time.perf_counter()
            page.get_by_role("button", name=press, exact=True).click()
            page.wait_for_timeout(1)
            wait_for(lambda old=before: page.evaluate(CHANGED, old), seconds=60)
            told = page.locator("#outcome").text_content() or ""
            rows.append(
                (f"{step}, until the new table is shown", f"{time.perf_counter() - began:.2f} s ({told})")
            )
    return rows


def memory(server: Server, before: set[int]) -> list[Row]:
    """Memory of the server and of the browser's processes."""
    mega = 1024**2
    served = psutil.Process(server.process.pid).memory_info().rss / mega
    browser = [
        p
        for p in psutil.process_iter(["name", "pid"])
        if "chrom" in (p.info["name"] or "") and p.pid not in before
    ]
    used = sum(p.memory_full_info().uss for p in browser) / mega
    return [
        ("server, resident", f"{served:.0f} MB"),
        ("browser, all its processes, own pages", f"{used:.0f} MB"),
    ]


def measured(result: Path, cache: Path, results: Path) -> list[Row]:
    """All figures of one run."""
    before = {p.pid for p in psutil.process_iter(["name"]) if "chrom" in (p.info["name"] or "")}
    with Server(result, results, cache=cache) as server, sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=CHROMIUM, args=CHROMIUM_FLAGS)
        page = browser.new_context(viewport=WINDOW).new_page()
        page.set_default_timeout(60_000)
        first, ready = opened(page, server)
        rows = [("first opening, until picture, marks and table", f"{first:.2f} s"),
                ("first opening, until all pictures are prepared", f"{ready:.1f} s")]  # fmt: skip
        size = sum(path.stat().st_size for path in cache.glob("*.frames"))
        rows.append(("frame pack", f"{size / 1e6:.0f} MB"))
        page.goto("about:blank")
        asked: list[Any] = []

        def note(request: Any) -> None:
            asked.append(request)

        page.on("requestfinished", note)
        rows.append(("later opening, until picture, marks and table", f"{opened(page, server)[0]:.2f} s"))
        sizes = [request.sizes()["responseBodySize"] for request in list(asked)]
        rows.append(("requests and bytes of a later opening", f"{len(sizes)}, {sum(sizes) / 1e6:.1f} MB"))
        rows += scrubbing(page)
        rows += deciding(page)
        rows += memory(server, before)
        browser.close()
    return rows


def main() -> None:
    """Time the page and write the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--result", type=Path, help="a measured recording; default: one is made")
    given = parser.parse_args().result
    with tempfile.TemporaryDirectory() as scratch:
        result = given or made_result(Path(scratch))
        rows = measured(result, Path(scratch) / "cache", Path(scratch) / "results")
    load = os.getloadavg()[0]
    rows.append(("load average at the end", f"{load:.1f} on {os.cpu_count()} cores"))
    lines = [
        "# The inspection page: 60 s of 1280 x 960 with 40 droplets",
        "",
        "| what | measured |",
        "|---|---|",
    ]
    text = "\n".join([*lines, *(f"| {what} | {value} |" for what, value in rows)]) + "\n"
    (HERE / "page.md").write_text(text, encoding="utf-8")
    print(text)


if __name__ == "__main__":
    main()
