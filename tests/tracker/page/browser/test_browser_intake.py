"""What is dropped on the page in a real browser, and the form that asks for the rest."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest
from page_server import CHROMIUM, Server
from playwright.sync_api import BrowserContext, expect

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no Chromium is installed")


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
