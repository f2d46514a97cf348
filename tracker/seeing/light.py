"""Light of each frame against the background: flicker, changes of illumination, a camera that was moved."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, Sightings

F32 = NDArray[np.float32]
IntArray = NDArray[np.int64]

_GRID, _OFFSET = 8, 4  # every eighth pixel of every eighth row, starting at the fourth
_MISMATCH, _MISMATCH_GREY = 1.5, 0.3  # of the usual mismatch, and grey: more is another picture
_SWING = 1.6  # ratio of light beyond which a frame belongs to another illumination
_LASTING = 4  # frames that make a change of illumination
_FLICKER = 0.004  # relative spread of the light that is corrected
_LEAST_LIGHT = 2.0  # grey over black; a darker background tells no ratio
_MOVED = 0.6  # px, least shift of the background that is a moved camera
_ALIKE = 0.15  # least response of the phase correlation that means anything
_JUMP = 1.0  # px, least common jump of all droplets
_JUMP_CLEAR = 4.0  # times the median deviation among droplets
_JUMP_DROPLETS = 4


@dataclass(frozen=True, slots=True)
class Light:
    """Coarse grid of the background, and how well sample pictures agree with it."""

    grid: F32  # grey over black
    black: float
    mismatch: float  # mean absolute difference of a sample, grey
    flickers: bool  # whether the light varies from frame to frame by more than its measurement


def coarse(picture: NDArray[Any], black: float) -> F32:
    """Grid of a picture, grey over black."""
    return np.asarray(picture[_OFFSET::_GRID, _OFFSET::_GRID], np.float32) - np.float32(black)


def light_of(samples: NDArray[Any], level: F32, black: float) -> Light:
    """Set up from sample pictures and their background.

    Parameters
    ----------
    samples : ndarray of shape (n, height, width)
    level : ndarray of shape (height, width)
        Background.
    black : float
        Grey value of no light.

    Returns
    -------
    light : Light
    """
    first = Light(coarse(level, black), black, np.inf, False)
    ratio, mismatch = compare(first, list(samples))
    spread = 1.4826 * float(np.median(np.abs(ratio - np.median(ratio))))
    return Light(
        first.grid, black, float(np.median(mismatch)), max(spread, float(ratio.std()) / 2) > _FLICKER
    )


def compare(light: Light, pictures: list[NDArray[Any]]) -> tuple[FloatArray, FloatArray]:
    """Light of pictures relative to the background, and what remains different.

    Parameters
    ----------
    light : Light
    pictures : list of n ndarray of shape (height, width)

    Returns
    -------
    ratio : ndarray of shape (n,)
        Median ratio of grey over black; 1 where the background is dark.
    mismatch : ndarray of shape (n,)
        Mean absolute difference after that, grey.
    """
    bright = light.grid > _LEAST_LIGHT
    told = int(bright.sum()) > light.grid.size // 4
    ratio, mismatch = np.ones(len(pictures)), np.empty(len(pictures))
    for i, picture in enumerate(pictures):
        grid = coarse(picture, light.black)
        if told:
            ratio[i] = max(float(np.median(grid[bright] / light.grid[bright])), 1e-3)
        mismatch[i] = float(np.abs(grid - np.float32(ratio[i]) * light.grid).mean())
    return ratio, mismatch


def even(light: Light, pictures: list[NDArray[Any]], ratio: FloatArray) -> list[NDArray[Any]]:
    """Pictures brought to the light of the background."""
    black = np.float32(light.black)
    return [(p - black) / np.float32(r) + black for p, r in zip(pictures, ratio, strict=True)]


def strange(
    light: Light, ratio: FloatArray, mismatch: FloatArray, *, times: float = 1.0
) -> NDArray[np.bool_]:
    """Which pictures do not show this background; `times` sets how far they may be from it."""
    far = mismatch > times * (_MISMATCH * light.mismatch * np.maximum(ratio, 1) + _MISMATCH_GREY)
    return np.asarray(far | (ratio > _SWING) | (ratio < 1 / _SWING))


def change_at(odd: NDArray[np.bool_]) -> int | None:
    """First of the pictures from which on at least four in a row, or all to the end, are strange."""
    run = 0
    for i, is_odd in enumerate(odd):
        run = run + 1 if is_odd else 0
        if run == _LASTING:
            return i - _LASTING + 1
    return len(odd) - run if run >= min(_LASTING, len(odd)) and run else None


def first_change(pictures: list[NDArray[Any]], black: float) -> int | None:
    """First of consecutive pictures that shows another illumination or place than those before; None if none does."""
    if len(pictures) < 4 * _LASTING:
        return None
    grids = np.stack([coarse(p, black) for p in pictures[: 2 * _LASTING]])
    light = Light(np.asarray(np.median(grids, axis=0), np.float32), black, np.inf, False)
    ratio, mismatch = compare(light, pictures)
    light = Light(light.grid, black, float(np.median(mismatch[2 * _LASTING : 4 * _LASTING])), False)
    return change_at(strange(light, ratio, mismatch))


def shift_between(before: F32, after: F32) -> tuple[float, float] | None:
    """Shift of one background against another in px (x, y); None if it is below what can be told."""
    if before.shape != after.shape:
        return None
    a, b = (np.asarray(p - cv2.GaussianBlur(p, (0, 0), 6), np.float32) for p in (before, after))
    window = cv2.createHanningWindow(a.shape[::-1], cv2.CV_32F)
    (x, y), response = cv2.phaseCorrelate(a, b, window)
    return (x, y) if response > _ALIKE and np.hypot(x, y) > _MOVED else None


def common_jumps(sightings: Sightings, piece: IntArray, times: FloatArray) -> list[int]:
    """Frames at which all droplets jump at once and go on as before: the camera was moved.

    Parameters
    ----------
    sightings : Sightings
    piece : ndarray of shape (N,)
        Piece of a track of each sighting.
    times : ndarray of shape (frames,)
        In s.

    Returns
    -------
    frames : list of int
        First frame after each jump.

    Notes
    -----
    A jump shows twice in second differences, forth and back; a change of the field shows once, and with the sign
    of each droplet's charge.
    """
    order = np.lexsort((sightings.frame, piece))
    number, frame = piece[order], sightings.frame[order]
    at = np.column_stack([sightings.x, sightings.y])[order]
    step = np.maximum(np.diff(times[frame]), 1e-12)[:, None]
    way = np.diff(at, axis=0)
    bend = way[1:] - way[:-1] * (step[1:] / step[:-1])
    whole = (number[2:] == number[:-2]) & (frame[2:] - frame[:-2] == 2)
    bend, last = bend[whole], frame[2:][whole]
    by = np.argsort(last, kind="stable")
    bend, last = bend[by], last[by]
    frames, begin, count = np.unique(last, return_index=True, return_counts=True)
    many = count >= _JUMP_DROPLETS
    middle = {
        int(f): np.median(bend[b : b + c], axis=0)
        for f, b, c in zip(frames[many], begin[many], count[many], strict=True)
    }
    found = []
    for f, jump in middle.items():
        size = float(np.hypot(*jump))
        if size < _JUMP or f + 1 not in middle or np.hypot(*(jump + middle[f + 1])) > 0.5 * size:
            continue
        rows = slice(*np.searchsorted(last, [f, f + 1]))
        if size > _JUMP_CLEAR * float(np.median(np.abs(bend[rows] - jump))):
            found.append(f)
    return found
