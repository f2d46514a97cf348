"""The picture in a real browser: clicks, rings, scrubbing, playing, and what is saved of it."""

from __future__ import annotations

import io
import json
import re
from pathlib import Path

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray
from page_browser import SIZES, on_stage, places, rest_on, row_of, screenshot
from page_server import CHROMIUM, wait_for
from playwright.sync_api import Page, expect

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no Chromium is installed")


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
