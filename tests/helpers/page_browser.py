"""What the browser tests of the inspection page share: going to a frame, finding droplets, looking at the screen."""

from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray
from page_server import wait_for
from playwright.sync_api import Page, expect

expect.set_options(timeout=20_000)
SIZES = ({"width": 1280, "height": 720}, {"width": 1013, "height": 767})


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


def on_stage(page: Page, script: str) -> None:
    """Run a line of script on the stage, which it calls s."""
    page.evaluate(f"() => {{ const s = fallrise.view.stage; {script} }}")


def screenshot(page: Page) -> NDArray[np.uint8]:
    """What is on the screen, RGB."""
    data = np.frombuffer(page.screenshot(), np.uint8)
    return np.asarray(cv2.imdecode(data, cv2.IMREAD_COLOR)[:, :, ::-1], np.uint8)


def violations(page: Page) -> list[str]:
    """Rules that axe-core finds broken on the page as it is now."""
    import axe_playwright_python

    page.evaluate((Path(axe_playwright_python.__file__).parent / "axe.min.js").read_text(encoding="utf-8"))
    told = page.evaluate(
        "axe.run(document).then((r) => r.violations.map((v) => `${v.id}: ${v.nodes[0].html.slice(0, 120)}`))"
    )
    return [str(line) for line in told]
