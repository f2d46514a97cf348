"""Light of each frame against the background: flicker, changes of illumination, a camera that was moved."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, Sightings
from tracker.seeing.background import spread_of

F32 = NDArray[np.float32]
IntArray = NDArray[np.int64]

_GRID = 8  # px, least distance of the pixels that are compared
_ACROSS = 40  # of them along the shorter side
_PATCH = 5  # pixels of the grid along each side of the means that are compared
_LOCAL = (
    3.0  # times the picture's mean difference that one place counts at most: a lamp in a corner is no change
)
_MISMATCH, _MISMATCH_GREY = 1.5, 0.7  # of the usual mismatch, and grey: more is another picture
_SWING = 1.6  # ratio of light beyond which a frame belongs to another illumination
_LASTING = 4  # frames that make a change of illumination
_FLICKER = 2.5  # standard errors of a picture's light: more spread among pictures is corrected
_NEAR = 4.0  # median differences: what is further off is a droplet or another light
_LEAST_LIGHT = 2.0  # grey over black; a darker background tells no ratio
_MOVED = 0.6  # px, least shift of the background that is a moved camera
_ALIKE = 0.6  # least correlation of two backgrounds that show one thing
_JUMP = 1.0  # px, least common jump of all droplets
_FEW_SIGHTINGS = 20  # fewer show no common motion
_JUMP_CLEAR = 4.0  # times the median deviation among droplets
_JUMP_DROPLETS = 4
_JUMP_SIGMA = (
    6.0  # standard deviations of the median of so many droplets: two in a row by chance in none of 1e9 frames
)


@dataclass(frozen=True, slots=True)
class Light:
    """Coarse grid of the background, and how well sample pictures agree with it."""

    grid: F32  # grey over black
    black: float
    mismatch: float  # usual mismatch of a sample, grey; see `compare`
    flickers: bool  # whether the light varies from frame to frame by more than its measurement


def coarse(picture: NDArray[Any], black: float) -> F32:
    """Pixels of a coarse grid, one or two thousand in all; grey over black."""
    return np.asarray(_grid(picture), np.float32) - np.float32(black)


def _grid(picture: NDArray[Any]) -> NDArray[Any]:
    step = max(_GRID, int(min(picture.shape) / _ACROSS))
    return picture[step // 2 :: step, step // 2 :: step]


def light_of(samples: NDArray[Any], level: F32 | None, black: float) -> Light:
    """Set up from sample pictures and their background.

    Parameters
    ----------
    samples : ndarray of shape (n, height, width)
    level : ndarray of shape (height, width) or None
        Background; the samples' median, if it is not known yet.
    black : float
        Grey value of no light.

    Returns
    -------
    light : Light
    """
    if level is None:
        grid = np.asarray(np.median([coarse(p, black) for p in samples], axis=0), np.float32)
    else:
        grid = coarse(level, black)
    first = Light(grid, black, np.inf, False)
    ratio, mismatch = compare(first, list(samples))
    spread = spread_of(ratio)
    usual = float(np.median(mismatch))
    # standard error of a mean of n ratios, from the mean absolute difference of patches
    doubt = 1.25 * _PATCH * usual / max(float(np.median(first.grid)), 1e-3) / math.sqrt(first.grid.size)
    return Light(first.grid, black, usual, max(spread, float(ratio.std()) / 2) > _FLICKER * doubt)


def compare(light: Light, pictures: list[NDArray[Any]]) -> tuple[FloatArray, FloatArray]:
    """Light of pictures relative to the background, and what remains different.

    Parameters
    ----------
    light : Light
    pictures : list of n ndarray of shape (height, width)

    Returns
    -------
    ratio : ndarray of shape (n,)
        Ratio of grey over black; 1 where the background is dark.
    mismatch : ndarray of shape (n,)
        Mean absolute difference of patches after that, grey.

    Notes
    -----
    Patches are means over some tens of px each way: another light or place changes them, noise and what a codec
    holds or lets go from picture to picture hardly do.
    """
    grids = np.stack([_grid(p) for p in pictures]).reshape(len(pictures), -1).astype(np.float32)
    grids -= np.float32(light.black)
    ground = light.grid.reshape(-1)
    ratio = _ratio(grids, ground)
    grids -= ratio[:, None].astype(np.float32) * ground
    patches = np.stack([cv2.blur(g.reshape(light.grid.shape), (_PATCH, _PATCH)) for g in grids])
    size = np.abs(patches, out=patches).reshape(len(pictures), -1)
    most = np.float32(_LOCAL) * size.mean(1, keepdims=True)
    return ratio, np.minimum(size, most, out=size).mean(1, dtype=np.float64)


def _ratio(grids: F32, ground: F32) -> FloatArray:
    """Median ratio to the ground, then mean of what is near it: of whole grey values, a median is coarse."""
    bright = ground > _LEAST_LIGHT
    if np.count_nonzero(bright) <= ground.size // 4:
        return np.ones(len(grids))
    lit, ground = (grids, ground) if bright.all() else (grids[:, bright], ground[bright])
    ratio = np.maximum(np.median(lit / ground, axis=1, overwrite_input=True), 1e-3)[:, None]
    rest = lit - ratio * ground
    size = np.abs(rest)
    near = size <= _NEAR * np.median(size, axis=1, keepdims=True) + 0.5
    more = (rest * near).sum(1, dtype=np.float64) / np.maximum((ground * near).sum(1, dtype=np.float64), 1e-3)
    return np.asarray(np.maximum(ratio[:, 0] + more, 1e-3), np.float64)


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
    """Shift of one background against another in px (x, y); None if it is below what can be told.

    Notes
    -----
    From the highest correlation of what is finer than glare. A reticle repeats itself, and correlation by phase
    alone, which weighs all frequencies alike, then takes noise for a shift.
    """
    if before.shape != after.shape:
        return None
    a, b = (np.asarray(p - cv2.GaussianBlur(p, (0, 0), 6), np.float32) for p in (before, after))
    window = cv2.createHanningWindow(a.shape[::-1], cv2.CV_32F)
    a, b = a * window, b * window
    alike = np.fft.irfft2(np.fft.rfft2(b) * np.fft.rfft2(a).conj(), a.shape)
    alike /= max(float(np.linalg.norm(a)) * float(np.linalg.norm(b)), 1e-9)
    at = np.unravel_index(int(alike.argmax()), alike.shape)
    shift = []
    for axis, size in enumerate(a.shape):
        left, middle, right = (float(np.roll(alike, 1 - k, axis)[at]) for k in range(3))
        place = int(at[axis]) + 0.5 * (left - right) / min(left + right - 2 * middle, -1e-12)
        shift.append((place + size / 2) % size - size / 2)
    y, x = shift
    return (x, y) if alike[at] > _ALIKE and math.hypot(x, y) > _MOVED else None


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
    of each droplet's charge. It must stand out of the second differences that Brownian motion and noise give in this
    recording: the median of n normal values scatters by sqrt(pi / (2 n)) of theirs.
    """
    if len(sightings) < _FEW_SIGHTINGS:
        return []
    order = np.lexsort((sightings.frame, piece))
    number, frame = piece[order], sightings.frame[order]
    at = np.column_stack([sightings.x, sightings.y])[order]
    step = np.maximum(np.diff(times[frame]), 1e-12)[:, None]
    way = np.diff(at, axis=0)
    bend = way[1:] - way[:-1] * (step[1:] / step[:-1])
    whole = (number[2:] == number[:-2]) & (frame[2:] - frame[:-2] == 2)
    bend, last = bend[whole], frame[2:][whole]
    if len(last) == 0:
        return []
    frames, middle, spread, count = _medians(last, bend)
    size = np.hypot(*middle.T)
    follows = np.append(np.diff(frames) == 1, False)
    back = np.roll(middle, -1, axis=0)
    usual = 1.4826 * float(
        np.median(np.abs(bend - np.median(bend, axis=0)), axis=0).max()
    )  # of the normal from its MAD
    chance = _JUMP_SIGMA * usual * np.sqrt(np.pi / (2 * count))
    jumped = (count >= _JUMP_DROPLETS) & follows & (size > np.maximum(_JUMP, chance))
    jumped &= size > _JUMP_CLEAR * spread
    jumped &= np.hypot(*(middle + back).T) < 0.5 * size
    return [int(f) for f in frames[jumped]]


def _medians(group: IntArray, values: FloatArray) -> tuple[IntArray, FloatArray, FloatArray, IntArray]:
    """Groups, medians of both columns, median absolute deviation (the larger of both), and count."""
    groups, number, count = np.unique(group, return_inverse=True, return_counts=True)
    middle_row = np.cumsum(count) - count + (count - 1) // 2

    def median(column: FloatArray) -> FloatArray:
        return np.asarray(column[np.lexsort((column, number))][middle_row])

    middle = np.stack([median(values[:, i]) for i in range(2)], 1)
    spread = np.stack([median(np.abs(values[:, i] - middle[number, i])) for i in range(2)], 1)
    return groups, middle, spread.max(1), count
