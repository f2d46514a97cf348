"""What is dropped on the page in a real browser, and the form that asks for the rest."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest
from page_server import CHROMIUM, Server, simulated_recording
from playwright.sync_api import BrowserContext, Page, expect

from tracker.simulate import Scene, simulate, write_bench

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
    expect(page.locator(".card > .error")).to_contain_text("fields need another look.")
    too_large = page.evaluate("""async () => {
      const { ShelfView } = await import("/static/shelf.js");
      const view = fallrise.view;
      view.intake.shelf.limit = 10;
      view.intake.take([new File(["x".repeat(20)], "big.avi")]);
      return view instanceof ShelfView && view.intake.error.textContent;
    }""")
    assert "too large" in too_large


def test_dropped_folder_of_pictures_is_one_recording(
    context: BrowserContext, server: Server, tmp_path: Path
) -> None:
    """A folder with pictures and a bench file, dropped as from a file manager, is sent in one piece and measured."""
    folder = picture_folder(tmp_path / "run 7")
    page = context.new_page()
    page.goto(server.address)
    drop_paths(page, folder)
    expect(page.locator(".files li")).to_have_count(2)
    expect(page.locator(".files")).to_contain_text("80 pictures")
    page.get_by_role("button", name="Measure", exact=True).click()
    expect(page.locator(".droplets tbody tr[data-droplet]").first).to_be_visible(timeout=60_000)
    assert page.evaluate("fallrise.view.result.times.length") == 80
    expect(page.locator(".says")).to_be_hidden()


def test_folder_can_be_chosen_with_the_keyboard_and_one_without_recording_is_told(
    context: BrowserContext, server: Server, tmp_path: Path
) -> None:
    """The chooser for folders takes the same; a folder of two pictures is told apart from a recording."""
    page = context.new_page()
    page.goto(server.address)
    (tmp_path / "notes").mkdir()
    for name in ("a.png", "b.png"):
        (tmp_path / "notes" / name).write_bytes(b"x")
    drop_paths(page, tmp_path / "notes")
    expect(page.locator(".card > .error")).to_contain_text("The folder notes holds no recording")
    page.set_input_files("#folder", picture_folder(tmp_path / "run 8"))
    expect(page.locator(".files")).to_contain_text("80 pictures")
    expect(page.locator(".card > .error")).to_be_empty()


def test_cancelled_measurement_can_be_asked_for_again(
    context: BrowserContext, server: Server, tmp_path: Path
) -> None:
    """While it runs the shelf shows how far it is; cancelled, it is measured again without being sent again."""
    recording = simulated_recording(tmp_path, name="long", seconds=40.0, droplets=3)
    page = context.new_page()
    page.goto(server.address)
    page.set_input_files("#files", [str(recording), str(tmp_path / "bench.toml")])
    page.get_by_role("button", name="Measure", exact=True).click()
    tile = page.locator(".tile-off", has_text="long")
    expect(tile).to_contain_text("Being measured")
    expect(tile.get_by_role("progressbar")).to_be_visible()
    expect(page.locator("#shelf-title + p")).to_contain_text("1 being measured")
    page.get_by_role("button", name="Cancel long.avi").click()
    expect(tile).to_contain_text("Not measured")
    expect(page.locator(".card > [role=status]").first).to_contain_text("The files are still here")
    page.reload()
    page.get_by_role("button", name="Measure again long.avi").click()
    expect(page.locator(".droplets tbody tr[data-droplet]").first).to_be_visible(timeout=60_000)


def picture_folder(folder: Path) -> Path:
    """A recording of 80 pictures with its bench file in the same folder."""
    scene = Scene(droplets=4, seconds=8.0, width=160, height=200, frame_rate=10.0)
    simulate(scene, folder, seed=3)
    write_bench(scene, folder / "bench.toml", recording=folder)
    return folder


def drop_paths(page: Page, path: Path) -> None:
    """Drop a file or folder of the disk on the page, as the system's file manager does."""
    box = page.locator(".drop").bounding_box()
    assert box
    at = {"x": box["x"] + 20, "y": box["y"] + 10}
    data = {"items": [], "files": [str(path)], "dragOperationsMask": 1}
    driver = page.context.new_cdp_session(page)
    for kind in ("dragEnter", "dragOver", "drop"):
        driver.send("Input.dispatchDragEvent", {"type": kind, **at, "data": data})
