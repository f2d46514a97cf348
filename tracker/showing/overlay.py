"""Tracks drawn over a picture. One function draws for the command and for the inspection page.

The verdict can be told without colour: keep is a circle, doubt a square, reject a cross; each bears the droplet's
number and trails its last places. Points are (x, y) with the centre of the first pixel at (0, 0), as OpenCV has it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd

# Okabe & Ito's palette, which people with any colour vision can tell apart (Color Universal Design, 2008); as BGR.
COLOURS = {"keep": (233, 180, 86), "doubt": (0, 159, 230), "reject": (167, 121, 204)}
_SHIFT = 4  # OpenCV draws at 1/16 px


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


def draw_overlay(
    picture: NDArray[np.uint8], marks: Sequence[Mark], *, zoom: int = 1, chosen: int | None = None
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

    Returns
    -------
    drawn : ndarray of uint8, shape (rows * zoom, columns * zoom, 3)
        BGR; the input is left as it is.
    """
    import cv2

    drawn: NDArray[Any] = cv2.cvtColor(picture, cv2.COLOR_GRAY2BGR)
    if zoom > 1:
        drawn = cv2.resize(drawn, None, fx=zoom, fy=zoom, interpolation=cv2.INTER_NEAREST)
    for mark in marks:
        colour = COLOURS.get(mark.verdict, COLOURS["reject"])
        thick = 3 if mark.droplet == chosen else 1
        trail = _to_screen(mark.trail, zoom)
        cv2.polylines(drawn, [trail], False, colour, thick, cv2.LINE_AA, _SHIFT)
        _draw_shape(drawn, mark, colour, thick, zoom)
    return np.asarray(drawn, dtype=np.uint8)


def _to_screen(points: NDArray[np.float64], zoom: int) -> NDArray[np.int32]:
    """Pixel centres of the picture as OpenCV's fixed-point places on the enlarged one."""
    placed = (points + 0.5) * zoom - 0.5
    return np.asarray(np.rint(placed * 2**_SHIFT), dtype=np.int32)


def _draw_shape(drawn: NDArray[Any], mark: Mark, colour: tuple[int, int, int], thick: int, zoom: int) -> None:
    """Circle, square or cross around the droplet, and its number beside it."""
    import cv2

    cx, cy = (int(v) for v in _to_screen(np.array([[mark.x, mark.y]]), zoom)[0])
    arm = (8 + zoom) << _SHIFT
    if mark.verdict == "keep":
        cv2.circle(drawn, (cx, cy), arm, colour, thick, cv2.LINE_AA, _SHIFT)
    elif mark.verdict == "doubt":
        cv2.rectangle(drawn, (cx - arm, cy - arm), (cx + arm, cy + arm), colour, thick, cv2.LINE_AA, _SHIFT)
    else:
        for sign in (-1, 1):
            near, far = arm // 3, arm
            for a, b in ((-far, -near), (near, far)):
                cv2.line(
                    drawn,
                    (cx + a, cy + sign * a),
                    (cx + b, cy + sign * b),
                    colour,
                    thick,
                    cv2.LINE_AA,
                    _SHIFT,
                )
    place = (int(cx / 2**_SHIFT + 10 + zoom), int(cy / 2**_SHIFT - 6))
    cv2.putText(drawn, str(mark.droplet), place, cv2.FONT_HERSHEY_SIMPLEX, 0.4, (0, 0, 0), 3, cv2.LINE_AA)
    cv2.putText(drawn, str(mark.droplet), place, cv2.FONT_HERSHEY_SIMPLEX, 0.4, colour, 1, cv2.LINE_AA)
