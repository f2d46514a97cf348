"""Tracks drawn over a picture. One function draws for the command and for the inspection page.

The verdict can be told without colour: keep is a circle, doubt a square, reject a cross; each bears the droplet's
number and trails its last places. Points are (x, y) with the centre of the first pixel at (0, 0), as OpenCV has it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd

# Okabe & Ito's palette, which people with any colour vision can tell apart (Color Universal Design, 2008); as BGR.
COLOURS = {"keep": (233, 180, 86), "doubt": (0, 159, 230), "reject": (167, 121, 204)}
_LEGEND = (235, 235, 235)  # BGR
_TEXT = 0.4  # size of text, relative to OpenCV's font
_SHIFT = 4  # OpenCV draws at 1/16 px

_Box = tuple[int, int, int, int]  # left, top, right, bottom in px


@dataclass(frozen=True, slots=True)
class Mark:
    """One droplet as it is drawn in one frame."""

    droplet: int
    verdict: str  # keep, doubt or reject
    x: float  # px
    y: float  # px
    trail: NDArray[np.float64]  # (M, 2) px, oldest first, ends at (x, y)


class TrackIndex:
    """Tracks of one result, ordered so that the marks of a frame are found at once.

    Parameters
    ----------
    tracks : DataFrame
        Columns droplet, frame, x_px, y_px, ordered by droplet, then frame.
    droplets : DataFrame
        Columns droplet, verdict.
    """

    def __init__(self, tracks: pd.DataFrame, droplets: pd.DataFrame) -> None:
        verdicts = dict(zip(droplets["droplet"], droplets["verdict"], strict=True))
        self._parts = []
        numbers = tracks["droplet"].to_numpy(np.int64)
        frames = tracks["frame"].to_numpy(np.int64)
        points = tracks[["x_px", "y_px"]].to_numpy(np.float64)
        for number in np.unique(numbers):
            first, last = np.searchsorted(numbers, [number, number + 1])
            verdict = str(verdicts.get(number, "reject"))
            self._parts.append((int(number), verdict, frames[first:last], points[first:last]))

    def marks(self, frame: int, *, trail: int = 30) -> list[Mark]:
        """Give the marks of one frame.

        Parameters
        ----------
        frame : int
            Decoded frame, from 0.
        trail : int, optional
            How many frames back the trail reaches.

        Returns
        -------
        marks : list of Mark
            One for each droplet that was seen in this frame.
        """
        made = []
        for number, verdict, frames, points in self._parts:
            last = int(np.searchsorted(frames, frame))
            if last == len(frames) or frames[last] != frame:
                continue
            first = int(np.searchsorted(frames, frame - trail))
            x, y = points[last]
            made.append(Mark(number, verdict, float(x), float(y), points[first : last + 1]))
        return made


def grey8(
    picture: NDArray[np.generic], *, low: float | None = None, high: float | None = None
) -> NDArray[np.uint8]:
    """Turn a grey picture of any depth into 8 bit for a screen.

    Parameters
    ----------
    picture : ndarray of shape (rows, columns)
        Grey values.
    low, high : float, optional
        Grey values shown as black and white; if not given, 8-bit pictures stay as they are and deeper ones
        are stretched from their smallest value to their largest.

    Returns
    -------
    grey : ndarray of uint8
        Same shape.
    """
    if low is None and high is None and picture.dtype == np.uint8:
        return np.asarray(picture, dtype=np.uint8)
    values = picture.astype(np.float32)
    low = float(values.min()) if low is None else low
    high = float(values.max()) if high is None else high
    scaled = (values - low) * (255.0 / max(high - low, 1e-9))
    return np.asarray(np.clip(np.rint(scaled), 0, 255), dtype=np.uint8)


def frame_caption(recording: Mapping[str, Any], frame: int) -> str:
    """Say when a frame was taken, and at which voltage.

    Parameters
    ----------
    recording : mapping
        As in ``recording.json``.
    frame : int
        Decoded frame, from 0.

    Returns
    -------
    caption : str
        Time in s and, within a segment of constant voltage, that voltage in V; empty if no times are stored.
    """
    times = recording.get("frame_times_s")
    if times is None or not 0 <= frame < len(times):
        return ""
    time = float(times[frame])
    segments = (recording.get("field") or {}).get("segments", ())
    volts = next((s["voltage_v"] for s in segments if s["start_s"] <= time < s["end_s"]), None)
    told = "" if volts is None else ", field off" if volts == 0 else f", {volts:+.4g} V"
    return f"{time:.3f} s{told}"


def draw_overlay(
    picture: NDArray[np.uint8],
    marks: Sequence[Mark],
    *,
    zoom: int = 1,
    chosen: int | None = None,
    caption: str = "",
) -> NDArray[np.uint8]:
    """Draw marks over a grey picture.

    Parameters
    ----------
    picture : ndarray of uint8, shape (rows, columns)
        Grey values.
    marks : sequence of Mark
        What is drawn.
    zoom : int, optional
        The picture is enlarged by this factor first, pixels staying square.
    chosen : int, optional
        Number of a droplet whose mark is drawn thicker.
    caption : str, optional
        Written into the lower left corner, with a legend of the marks beside it where there is room.

    Returns
    -------
    drawn : ndarray of uint8, shape (rows * zoom, columns * zoom, 3)
        BGR; the input is left as it is.
    """
    import cv2

    drawn: NDArray[Any] = cv2.cvtColor(picture, cv2.COLOR_GRAY2BGR)
    if zoom > 1:
        drawn = cv2.resize(drawn, None, fx=zoom, fy=zoom, interpolation=cv2.INTER_NEAREST)
    taken: list[_Box] = []
    for mark in marks:
        colour = COLOURS.get(mark.verdict, COLOURS["reject"])
        thick = 3 if mark.droplet == chosen else 1
        trail = _to_screen(mark.trail, zoom)
        cv2.polylines(drawn, [trail], False, colour, thick, cv2.LINE_AA, _SHIFT)
        x, y = (int(v) for v in _to_screen(np.array([[mark.x, mark.y]]), zoom)[0])
        _draw_shape(drawn, mark.verdict, (x, y), (8 + zoom) << _SHIFT, colour, thick)
        text = str(mark.droplet)
        _write(drawn, text, _label_place((x >> _SHIFT, y >> _SHIFT), text, zoom, taken), colour)
    if caption:
        _draw_legend(drawn, caption)
    return np.asarray(drawn, dtype=np.uint8)


def _to_screen(points: NDArray[np.float64], zoom: int) -> NDArray[np.int32]:
    """Pixel centres of the picture as OpenCV's fixed-point places on the enlarged one."""
    placed = (points + 0.5) * zoom - 0.5
    return np.asarray(np.rint(placed * 2**_SHIFT), dtype=np.int32)


def _draw_shape(
    drawn: NDArray[Any],
    verdict: str,
    centre: tuple[int, int],
    arm: int,
    colour: tuple[int, int, int],
    thick: int,
) -> None:
    """Circle, square or cross about a place; place and arm in 1/16 px."""
    import cv2

    cx, cy = centre
    if verdict == "keep":
        cv2.circle(drawn, (cx, cy), arm, colour, thick, cv2.LINE_AA, _SHIFT)
    elif verdict == "doubt":
        cv2.rectangle(drawn, (cx - arm, cy - arm), (cx + arm, cy + arm), colour, thick, cv2.LINE_AA, _SHIFT)
    else:
        for sign in (-1, 1):
            for a, b in ((-arm, -(arm // 3)), (arm // 3, arm)):
                ends = (cx + a, cy + sign * a), (cx + b, cy + sign * b)
                cv2.line(drawn, *ends, colour, thick, cv2.LINE_AA, _SHIFT)


def _write(drawn: NDArray[Any], text: str, place: tuple[int, int], colour: tuple[int, int, int]) -> None:
    """Write text with a dark rim; `place` is the left end of its base line in px."""
    import cv2

    for ink, thick in (((0, 0, 0), 3), (colour, 1)):
        cv2.putText(drawn, text, place, cv2.FONT_HERSHEY_SIMPLEX, _TEXT, ink, thick, cv2.LINE_AA)


def _label_place(at: tuple[int, int], text: str, zoom: int, taken: list[_Box]) -> tuple[int, int]:
    """Place of a number beside its droplet: the first of four that no other number has; it is added to `taken`."""
    import cv2

    (width, height), _ = cv2.getTextSize(text, cv2.FONT_HERSHEY_SIMPLEX, _TEXT, 1)
    right, left = at[0] + 10 + zoom, at[0] - 10 - zoom - width
    above, below = at[1] - 6, at[1] + 6 + height
    places = [(right, above), (right, below), (left, above), (left, below)]
    boxes = [(x - 1, y - height - 1, x + width + 1, y + 1) for x, y in places]
    free = (i for i, box in enumerate(boxes) if not any(_overlap(box, other) for other in taken))
    chosen = next(free, 0)
    taken.append(boxes[chosen])
    return places[chosen]


def _overlap(one: _Box, other: _Box) -> bool:
    return one[0] < other[2] and other[0] < one[2] and one[1] < other[3] and other[1] < one[3]


def _draw_legend(drawn: NDArray[Any], caption: str) -> None:
    """Caption in the lower left corner and, in pictures with room for it, what the three shapes mean."""
    import cv2

    base, x = drawn.shape[0] - 6, 6
    end = x + cv2.getTextSize(caption, cv2.FONT_HERSHEY_SIMPLEX, _TEXT, 1)[0][0] + 24
    shown = tuple(COLOURS) if end + 3 * 64 <= drawn.shape[1] else ()
    strip = drawn[base - 15 :, : end + 64 * len(shown) - 12]
    strip //= 4  # a droplet below keeps its mark, dimmed, and no legend's cross lies on its ring unnoticed
    _write(drawn, caption, (x, base), _LEGEND)
    for x, verdict in zip(range(end, end + 3 * 64, 64), shown, strict=False):
        _draw_shape(drawn, verdict, (x << _SHIFT, (base - 4) << _SHIFT), 5 << _SHIFT, _LEGEND, 1)
        _write(drawn, verdict, (x + 10, base), _LEGEND)
