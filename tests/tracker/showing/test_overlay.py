"""Marks, numbers, caption and legend of the overlay."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.showing.overlay import Mark, draw_overlay, frame_caption

RECORDING = {
    "frame_times_s": [0.0, 0.04, 0.08, 0.12],
    "field": {"segments": [{"start_s": 0.0, "end_s": 0.04, "voltage_v": 0.0},
                           {"start_s": 0.05, "end_s": 0.1, "voltage_v": -260.0}]},
}  # fmt: skip


def mark(droplet: int, x: float, y: float, verdict: str = "keep") -> Mark:
    """A droplet without a trail."""
    return Mark(droplet, verdict, x, y, np.array([[x, y]]))


@pytest.mark.parametrize(
    ("frame", "text"), [(0, "0.000 s, field off"), (1, "0.040 s"), (2, "0.080 s, -260 V"), (9, "")]
)
def test_caption_tells_time_and_voltage(frame, text):
    """A frame within a segment has its voltage; one between two segments or unknown to the recording has none."""
    assert frame_caption(RECORDING, frame) == text


def test_caption_and_legend_are_grey_and_in_the_corner():
    """The legend stays in the lowest 20 rows, takes no verdict's colour, and is left out where there is no room."""
    for width, right in ((512, 250), (160, 100)):
        blank = np.zeros((200, width), np.uint8)
        drawn = draw_overlay(blank, [], caption="1.000 s, -260 V")
        rows, columns = np.nonzero(drawn.any(axis=2))
        assert rows.min() >= 180
        assert (columns.max() > right) == (width == 512)
        assert np.ptp(drawn.astype(int), axis=2).max() == 0
        assert not draw_overlay(blank, []).any()


def test_numbers_of_near_droplets_do_not_cover_each_other():
    """A droplet two pixels off leaves the first one's number as it was, and bears its own below it."""
    blank = np.zeros((120, 200), np.uint8)
    alone, both = (
        draw_overlay(blank, marks) for marks in ([mark(48, 60, 60)], [mark(48, 60, 60), mark(7, 62, 60)])
    )
    number = np.s_[44:56, 74:100]  # right of both circles
    assert alone[number].any()
    assert np.array_equal(alone[number], both[number])
    below = np.s_[64:80, 74:100]
    assert not alone[below].any()
    assert both[below].any()


def test_mark_below_the_legend_is_dimmed():
    """Where the legend lies a droplet's ring is a quarter as bright, so that no cross of the legend seems to be its."""
    blank, ring = np.zeros((200, 512), np.uint8), [mark(4, 250, 192)]
    plain, below = draw_overlay(blank, ring), draw_overlay(blank, ring, caption="1.000 s, -260 V")
    blue = below.astype(int) - draw_overlay(blank, [], caption="1.000 s, -260 V")
    strip = np.s_[180:, 235:265]  # the ring
    assert plain[strip].max() > 200
    assert 0 < blue[strip].max() <= plain[strip].max() // 4 + 1  # whole numbers round down
