"""What a recording tells of its own optics and camera: spot width, noise of a pixel, threshold."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray
from tracker.seeing.background import Background, fill_restless, find_background, spread_of
from tracker.seeing.camera import find_camera, saturation
from tracker.seeing.detect import Detector, build_detector, cut_windows, find_peaks, gaussian_kernel
from tracker.seeing.fit import Camera, Spots, Windows, fit_spots
from tracker.seeing.light import Light, compare, even, light_of

F32 = NDArray[np.float32]

_SCALES = (0.7, 1.0, 1.4, 2.0, 2.8, 4.0, 5.6, 8.0)  # px, spot widths tried
_DEFAULT_SCALE = 2  # index of the scale taken where nothing is seen
_ROUNDING = 0.0814  # least noise times width: that of rounding to whole grey values, sqrt(1 / 12 / 4 pi)
_COARSE = 2.9  # px, scales up to here must show the noise of finer ones
_UNSHADED = 0.97  # least shade in the window of a spot that is off the lines
_LEAST_PICTURES = 2
_FEW = 5  # fewer spots teach nothing
_SEEN = 6.0  # signal to noise of a spot that teaches
_CLEAR = 0.3  # of the signal to noise of the clearest: fainter spots may be flecks of a codec, however many
_CLEAREST = 2  # spots of a picture that count as the clearest
_TEACHERS = 400  # spots that are enough
_PIXELS = 20_000_000  # of sample pictures in which teachers are sought, at most
_PICTURES = 20  # sample pictures in which teachers are sought


@dataclass(frozen=True, slots=True)
class Eyes:
    """All that is needed to look at a frame."""

    background: Background
    detector: Detector
    camera: Camera  # for the weights of fits
    width: float  # px, standard deviation of a sharp spot
    reach: int  # px, half side of the fit's window
    noise: Camera  # as `camera`, for standard deviations
    light: Light
    report: dict[str, Any]


def learn(samples: NDArray[Any], *, black: float, full_scale: float, false_alarms: float) -> Eyes:
    """Find background, spot width, noise and threshold from sample pictures.

    Parameters
    ----------
    samples : ndarray of shape (n, height, width), uint8 or uint16
        Pictures spread over the recording, of one illumination.
    black, full_scale : float
        Grey values of no light and of saturation as the file states it.
    false_alarms : float
        False sightings a frame that are accepted.

    Returns
    -------
    eyes : Eyes
    """
    full_scale = saturation(samples, full_scale)
    samples, flickers = _evened(samples, black)
    background = find_background(samples, black=black)
    many = int(np.clip(_PIXELS // samples[0].size, _LEAST_PICTURES, _PICTURES))
    chosen = samples[np.unique(np.linspace(0, len(samples) - 1, many).astype(int))]
    residual = chosen - background.level
    guess, noise = scale_search(residual)
    filled = fill_restless(background, samples, width=guess, black=black)
    if filled is not background:
        background, residual = filled, chosen - filled.level
        guess, noise = scale_search(residual)
    if (
        background.variance == 0 and len(samples) >= _LEAST_PICTURES
    ):  # the surroundings of a spot are no still picture: noise is what changes in time
        noise = change_noise(samples, guess)
    camera = Camera(white_variance(noise, guess), 0.0, black, full_scale)
    windows, x, y = find_teachers(chosen, residual, background, camera, guess=guess)
    width, spots, clear = find_width(windows, (x, y), camera, guess=guess)
    true = camera
    if len(clear) >= _FEW:
        camera, true = find_camera(windows.take(clear), spots.take(clear), residual, background, camera)
        width, spots, clear = find_width(windows, (x, y), camera, guess=width)
    detector, found = build_detector(samples, background.level, width=width, false_alarms=false_alarms)
    reach = min(max(3, math.ceil(2.8 * width)), (min(samples.shape[1:]) - 1) // 2)
    report = {
        "spot_width_px": width, "read_noise": math.sqrt(camera.read_variance), "camera_gain": true.gain,
        "saturation": full_scale, "binning": detector.binning, "background_samples": background.samples,
        "line_share": background.line_share, "flickers": flickers, "teaching_spots": len(clear), **found,
    }  # fmt: skip
    light = light_of(samples, background.level, black)
    return Eyes(background, detector, camera, width, reach, true, replace(light, flickers=flickers), report)


def _evened(samples: NDArray[Any], black: float) -> tuple[NDArray[Any], bool]:
    """Samples at one brightness, and whether they had to be brought there."""
    light = light_of(samples, None, black)
    if not light.flickers or len(samples) < _LEAST_PICTURES:
        return samples, False
    ratio, _ = compare(light, list(samples))
    return np.stack(even(light, list(samples), ratio / np.median(ratio))).astype(np.float32), True


def change_noise(samples: NDArray[Any], sigma: float) -> float:
    """Standard deviation, from their differences, of single pictures smoothed by a Gaussian."""
    differences = np.diff(np.stack([smoothed(p.astype(np.float32), sigma) for p in samples]), axis=0)
    return spread_of(differences) / math.sqrt(2)


def white_variance(noise: float, sigma: float) -> float:
    """Variance of a pixel of the white noise that a Gaussian filter turns into `noise`; at least rounding's.

    The filter leaves 1 / (4 pi sigma^2) of a white variance. Compression takes noise from single pixels that
    it leaves in the sums over a spot, and those are what a fit feels.
    """
    return max(4 * math.pi * sigma**2 * noise**2, 1 / 12)


def find_teachers(
    pictures: NDArray[Any], residual: F32, background: Background, camera: Camera, *, guess: float
) -> tuple[Windows, FloatArray, FloatArray]:
    """Windows around the clearest lone spots of some pictures, and where the spots are in px."""
    frame, x, y = _lone_spots(residual, guess, camera)
    reach = min(max(3, math.ceil(3.2 * guess)), (min(residual.shape[1:]) - 1) // 2)
    windows = cut_windows(
        pictures, (frame, x, y), reach=reach, background=background, full_scale=camera.full_scale
    )
    return windows, x, y


def find_width(
    windows: Windows, at: tuple[FloatArray, FloatArray], camera: Camera, *, guess: float
) -> tuple[float, Spots, NDArray[np.int64]]:
    """Width of sharp spots from free fits to lone ones.

    Parameters
    ----------
    windows : Windows
        Around lone spots.
    at : tuple of two ndarray
        Their x and y in px.
    camera : Camera
    guess : float
        First guess of the width in px.

    Returns
    -------
    width : float
        px; the narrower axis counts, as motion widens the other, and spots off the reticle's lines if they are
        enough. The guess, if too few are clear.
    spots : Spots
        All fits.
    clear : ndarray
        Rows that fitted well.
    """
    start = np.full(len(at[0]), guess)
    spots = fit_spots(windows, at, camera=camera, width=(start, start), free_width=True, rounds=8)
    clear = spots.good & (np.abs(np.log(spots.sx * spots.sy) / 2 - math.log(guess)) < math.log(2))
    clear &= np.hypot(spots.x - at[0], spots.y - at[1]) < 2 * guess
    free = clear & (windows.shade.min((1, 2)) > _UNSHADED)
    rows = np.flatnonzero(free if free.sum() >= 4 * _FEW else clear)
    if len(rows) < _FEW:
        return guess, spots, np.flatnonzero(clear)
    return float(min(np.median(spots.sx[rows]), np.median(spots.sy[rows]))), spots, np.flatnonzero(clear)


def scale_search(residual: F32) -> tuple[float, float]:
    """Width of the filter in which most spots stand out best, and the noise that it leaves.

    Returns
    -------
    width : float
        px; the default where nothing is seen.
    noise : float
        Standard deviation in grey of the residual smoothed with that width.

    Notes
    -----
    White noise falls as 1 / width. A compressed recording has less of it in fine detail; there the noise of the
    coarser scales is carried down, or every fleck would look like a very small spot.
    """
    few = int(np.clip(_PIXELS // (8 * residual[0].size), 1, 4))
    pictures = residual[:: max(1, len(residual) // few)][:few]
    scales = [s for s in _SCALES if 6 * s <= min(residual.shape[1:])] or [_SCALES[0]]
    smooth = [np.stack([smoothed(r, s) for r in pictures]) for s in scales]
    raw = [spread_of(f[:, ::4, ::4]) * s for f, s in zip(smooth, scales, strict=True)]
    coarse = [i for i, s in enumerate(scales) if s <= _COARSE]
    noise = [max(*raw[i : coarse[-1] + 1], raw[i], _ROUNDING) / s for i, s in enumerate(scales)]
    for pictures, n in zip(smooth, noise, strict=True):
        np.divide(pictures, np.float32(n), out=pictures)
    best = smooth[0].copy()
    for pictures in smooth[1:]:
        np.maximum(best, pictures, out=best)
    frame, x, y, score = find_peaks(best, _SEEN)
    at = (frame, np.rint(y).astype(int), np.rint(x).astype(int))
    which = np.argmax([pictures[at] for pictures in smooth], axis=0)
    order = np.argsort(-score)[:_TEACHERS]
    order = order[score[order] > _least_score(score, min(few, len(residual)))]
    index = _DEFAULT_SCALE if len(order) < _FEW else int(np.median(which[order]))
    return scales[min(index, len(scales) - 1)], noise[min(index, len(scales) - 1)]


def smoothed(picture: F32, sigma: float) -> F32:
    """Gaussian smoothing; wide ones at reduced size, which loses nothing that they leave."""
    step = 1
    while sigma / (2 * step) >= _COARSE / 2:
        step *= 2
    if step == 1:
        kernel = gaussian_kernel(sigma)
        return np.asarray(cv2.sepFilter2D(picture, cv2.CV_32F, kernel, kernel, borderType=cv2.BORDER_REFLECT))
    height, width = picture.shape
    small = cv2.resize(picture, (-(-width // step), -(-height // step)), interpolation=cv2.INTER_AREA)
    kernel = gaussian_kernel(sigma / step)
    small = cv2.sepFilter2D(small, cv2.CV_32F, kernel, kernel, borderType=cv2.BORDER_REFLECT)
    return np.asarray(cv2.resize(small, (width, height), interpolation=cv2.INTER_LINEAR), np.float32)


def _least_score(score: FloatArray, pictures: int) -> float:
    """Signal to noise of a spot that teaches: a share of that of the clearest ones, a few in each picture."""
    clearest = np.sort(score)[::-1][: _CLEAREST * pictures]
    return _CLEAR * float(clearest[-1]) if len(clearest) else 0.0


def _lone_spots(
    residual: F32, width: float, camera: Camera
) -> tuple[NDArray[np.int64], FloatArray, FloatArray]:
    """Clearest spots without a neighbour within 8 widths."""
    from scipy.spatial import cKDTree

    smooth = np.stack([smoothed(r, width) for r in residual])
    empty = camera.read_variance + camera.gain * float(np.median(residual))
    smooth /= math.sqrt(empty / (4 * math.pi * width**2))
    frame, x, y, score = find_peaks(smooth, _SEEN)
    apart = 1e6  # px between the planes of different pictures
    tree = cKDTree(np.column_stack([x, y, apart * frame]))
    lone = np.ones(len(x), np.bool_)
    pairs = tree.query_pairs(8 * width, output_type="ndarray")
    lone[pairs.ravel()] = False
    lone &= score > _least_score(score, len(residual))
    rows = np.flatnonzero(lone)
    rows = rows[np.argsort(-score[rows])[:_TEACHERS]]
    return frame[rows], x[rows], y[rows]
