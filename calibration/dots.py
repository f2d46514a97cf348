"""Dots of a dot grid and corners of a chessboard: where they are, to a few hundredths of a pixel.

Both are places where the smoothed picture is level: a dot is its top, a corner its saddle.
"""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

MOST_DOTS = 6_000  # beyond these more dots sharpen nothing that the pattern's tolerance has not blunted


@dataclass(frozen=True, slots=True)
class Spots:
    """Candidates for the nodes of a lattice."""

    place: FloatArray  # (N, 2) px, x and y
    size: float  # px, radius of a dot, or width of the kernel for corners
    fill: float  # fraction of a square of the nearest distance that a dot covers; 0 for corners


def find_dots(flat: NDArray[np.float32], sign: int) -> Spots | None:
    """Find dots: spots of like size, as round as they are wide.

    Parameters
    ----------
    flat : ndarray of float32
        Flattened picture.
    sign : int
        +1 for bright dots, -1 for dark ones.

    Returns
    -------
    spots : Spots or None
        None if there are fewer than nine.
    """
    smooth = np.asarray(cv2.GaussianBlur(sign * flat, (0, 0), 0.7), dtype=np.float32)
    binary = _threshold(smooth)
    count, _, facts, centres = cv2.connectedComponentsWithStats(binary, connectivity=4, ltype=cv2.CV_32S)
    if count < 10:
        return None
    left, top, wide, high, area = (facts[1:, k].astype(float) for k in range(5))
    height, width = flat.shape
    whole = (left > 0) & (top > 0) & (left + wide < width) & (top + high < height)
    round_ = (np.maximum(wide, high) <= 1.8 * np.minimum(wide, high) + 1) & (area >= 0.5 * wide * high)
    fit = whole & round_ & (area >= 4)
    if fit.sum() < 9:
        return None
    usual = _usual(area[fit])
    fit &= (area > usual / 2.5) & (area < 2.5 * usual)
    if fit.sum() < 9:
        return None
    place = centres[1:][fit]
    distance = _nearest(place)
    return Spots(place, float(np.sqrt(usual / np.pi)), float(usual / distance**2))


def _threshold(smooth: NDArray[np.float32]) -> NDArray[np.uint8]:
    """Split the picture at Otsu's threshold, taken over a range free of the brightest and darkest specks."""
    sample = smooth.ravel()[:: max(1, smooth.size // 500_000)]
    low, high = np.percentile(sample, [0.2, 99.8])
    scaled = np.clip((smooth - low) * (255 / max(high - low, 1e-9)), 0, 255).astype(np.uint8)
    return np.asarray(cv2.threshold(scaled, 0, 1, cv2.THRESH_BINARY | cv2.THRESH_OTSU)[1], dtype=np.uint8)


def _usual(area: FloatArray) -> float:
    """Area that occurs most often, on a scale of ratios."""
    bins = np.round(4 * np.log2(area)).astype(int)
    counts = np.convolve(np.bincount(bins - bins.min()), [1, 1, 1], "same")
    near = np.abs(bins - bins.min() - int(np.argmax(counts))) <= 1
    return float(np.median(area[near]))


def _nearest(place: FloatArray) -> float:
    """Usual distance to the nearest neighbour."""
    from scipy.spatial import cKDTree

    distance, _ = cKDTree(place).query(place[:: 1 + len(place) // MOST_DOTS], k=2)
    return float(np.median(distance[:, 1]))


def find_corners(flat: NDArray[np.float32], sigma: float, *, least: float) -> Spots | None:
    """Find the corners of a chessboard: saddles where two dark and two bright squares meet.

    A picture of more than 1600 px is looked at in a smaller size; `refine_spots` goes back to the full one.

    Parameters
    ----------
    flat : ndarray of float32
        Flattened picture.
    sigma : float
        Width of the smoothing in px.
    least : float
        Saddles weaker than this fraction of the twentieth strongest are left out.

    Returns
    -------
    spots : Spots or None
        None if there are fewer than nine.
    """
    scale = max(1.0, max(flat.shape) / 1600)
    size = round(flat.shape[1] / scale), round(flat.shape[0] / scale)
    small = flat if scale == 1 else cv2.resize(flat, size, interpolation=cv2.INTER_AREA)
    smooth = cv2.GaussianBlur(small, (0, 0), sigma)
    xx = cv2.Sobel(smooth, cv2.CV_32F, 2, 0, ksize=3)
    yy = cv2.Sobel(smooth, cv2.CV_32F, 0, 2, ksize=3)
    xy = cv2.Sobel(smooth, cv2.CV_32F, 1, 1, ksize=3)
    saddle = xy**2 - xx * yy
    border = 2 * int(np.ceil(2 * sigma)) + 1
    top = (saddle == cv2.dilate(saddle, np.ones((border, border), np.uint8))) & (saddle > 0)
    top[:border] = top[-border:] = False
    top[:, :border] = top[:, -border:] = False
    y, x = np.nonzero(top)
    if len(x) < 9:
        return None
    strength = saddle[y, x]
    if len(x) > MOST_DOTS:
        strongest = np.argpartition(-strength, MOST_DOTS)[:MOST_DOTS]
        x, y, strength = x[strongest], y[strongest], strength[strongest]
    keep = strength > least * np.sort(strength)[-max(9, min(len(strength), 40) // 2)]
    ratio = np.array(flat.shape[::-1]) / np.array(small.shape[::-1])
    place = (np.stack([x[keep], y[keep]], axis=1) + 0.5) * ratio - 0.5
    return Spots(place, sigma * scale, 0.0) if len(place) >= 9 else None


def lattice_vectors(place: FloatArray) -> FloatArray | None:
    """Find the two steps from a node to its neighbours that most nodes have in common.

    Parameters
    ----------
    place : ndarray of shape (N, 2)
        Nodes and strays, px.

    Returns
    -------
    steps : ndarray of shape (2, 2) or None
        The step along I (nearer to +x) and along J (nearer to +y), px; None if no square lattice stands out.
    """
    from scipy.spatial import cKDTree

    nearest = min(9, len(place))
    some = place[:: 1 + len(place) // MOST_DOTS]
    distance, neighbour = cKDTree(place).query(some, k=nearest)
    vectors = (place[neighbour[:, 1:]] - some[:, None, :]).reshape(-1, 2)
    length = np.hypot(vectors[:, 0], vectors[:, 1])
    usual = float(np.median(distance[:, 1]))
    close = (length < 1.28 * usual) & (length > 0.6 * usual)
    if close.sum() < 8:
        return None
    chosen = vectors[close]
    phase = 4 * np.arctan2(chosen[:, 1], chosen[:, 0])
    histogram, edges = np.histogram(phase % (2 * np.pi), bins=36, range=(0, 2 * np.pi))
    peak = edges[int(np.argmax(histogram + np.roll(histogram, 1) + np.roll(histogram, -1)))] + np.pi / 36
    turn = ((peak + np.pi) % (2 * np.pi) - np.pi) / 4
    steps = []
    for angle in (turn, turn + np.pi / 2):
        along = chosen @ np.array([np.cos(angle), np.sin(angle)])
        across = chosen @ np.array([-np.sin(angle), np.cos(angle)])
        same = (along > 0) & (np.abs(across) < 0.35 * along)
        if same.sum() < max(4, 0.15 * len(some)):
            return None
        steps.append(np.median(chosen[same], axis=0))
    return np.array(steps)


def refine_spots(
    picture: NDArray[np.float32], place: FloatArray, sigma: float, *, steps: FloatArray
) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Place of each dot or corner between the pixels.

    Parameters
    ----------
    picture : ndarray of float32
        Grey values.
    place : ndarray of shape (N, 2)
        Starting places in px.
    sigma : float
        Width of the Gaussian in px.
    steps : ndarray of shape (2, 2)
        Steps from a node to its neighbours in px; a slope of the ground between the four middles of the cells
        around a dot is taken off.

    Returns
    -------
    place : ndarray of shape (N, 2)
        Refined, px.
    fine : ndarray of bool of shape (N,)
        False where the picture's edge cuts the kernel, the place wandered off, or the spot is 1.6 times as far from
        its own mirror image as usual: debris lies on it or beside it.

    Notes
    -----
    Zero of the gradient of the picture smoothed by a Gaussian, by Newton's method on the exact kernel: for a dot
    the least-squares place of a spot of that profile, for a corner the saddle.
    """
    moved, fine, uneven = place.copy(), np.zeros(len(place), dtype=bool), np.zeros(len(place))
    reach = int(np.ceil(3 * sigma)) + 1
    slope = _ground(picture, place, steps)
    most = max(1, 4_000_000 // (2 * reach + 1) ** 2)
    for first in range(0, len(place), most):
        rows = slice(first, first + most)
        moved[rows], fine[rows], uneven[rows] = _refine(picture, place[rows], slope[rows], sigma, reach)
    if fine.any():
        fine &= uneven < 1.6 * np.median(uneven[fine])
    return moved, fine


def _ground(picture: NDArray[np.float32], place: FloatArray, steps: FloatArray) -> FloatArray:
    """Slope of the ground about each node, per px, from the middles of the four cells around it."""
    smooth = cv2.GaussianBlur(picture, (0, 0), max(0.5, float(np.hypot(*steps[0])) / 12))
    arms = np.array([(steps[0] + steps[1]) / 2, (steps[0] - steps[1]) / 2])
    rises = []
    for arm in arms:
        ends = []
        for sign in (1, -1):
            at = (place + sign * arm).astype(np.float32)
            values = cv2.remap(
                smooth, at[:, None, 0], at[:, None, 1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE
            )
            ends.append(values[:, 0].astype(np.float64))
        rises.append(ends[0] - ends[1])
    return np.asarray(np.linalg.solve(2 * arms, np.array(rises)).T)


def _refine(
    picture: NDArray[np.float32], place: FloatArray, slope: FloatArray, sigma: float, reach: int
) -> tuple[FloatArray, NDArray[np.bool_], FloatArray]:
    """Refine one batch of spots; also how far each is from its mirror image, in grey values."""
    height, width = picture.shape
    centre = np.rint(place).astype(int)
    whole = (centre >= reach).all(axis=1) & (centre < np.array([width, height]) - reach).all(axis=1)
    inner = np.clip(centre, reach, np.array([width, height]) - reach - 1)
    offsets = np.arange(-reach, reach + 1)
    patch = picture[inner[:, 1, None, None] + offsets[:, None], inner[:, 0, None, None] + offsets[None, :]]
    ground = slope[:, 1, None, None] * offsets[:, None] + slope[:, 0, None, None] * offsets[None, :]
    patch = patch.astype(np.float64) - patch.mean(axis=(1, 2), keepdims=True) - ground
    start = place - inner
    shift = start.copy()
    for _ in range(6):
        kx, ky = _kernels(offsets, shift[:, 0], sigma), _kernels(offsets, shift[:, 1], sigma)
        rows = [np.einsum("nij,nj->ni", patch, k) for k in kx]
        gx, gy = (rows[1] * ky[0]).sum(1), (rows[0] * ky[1]).sum(1)
        xx, yy, xy = (rows[2] * ky[0]).sum(1), (rows[0] * ky[2]).sum(1), (rows[1] * ky[1]).sum(1)
        det = xx * yy - xy**2
        det = np.where(np.abs(det) < 1e-12, np.inf, det)
        step = -np.stack([yy * gx - xy * gy, xx * gy - xy * gx], axis=1) / det[:, None]
        shift += np.clip(step, -0.5 * sigma, 0.5 * sigma)
    stayed = np.hypot(*(shift - start).T) < max(1.5, 0.7 * sigma)
    return inner + shift, whole & stayed, _unevenness(patch, shift, offsets, sigma)


def _unevenness(patch: FloatArray, shift: FloatArray, offsets: NDArray[np.int64], sigma: float) -> FloatArray:
    """Rms difference of each patch from itself turned by half a turn about its refined place, near that place."""
    size = len(offsets)
    # To half a pixel: the mirror image of pixel n about place s is pixel 2 s - n.
    turned = np.clip(np.rint(2 * shift).astype(int)[:, :, None] - offsets + size // 2, 0, size - 1)
    mirror = patch[np.arange(len(patch))[:, None, None], turned[:, 1, :, None], turned[:, 0, None, :]]
    bells = [np.exp(-0.5 * ((offsets - shift[:, k, None]) / (1.5 * sigma)) ** 2) for k in (1, 0)]
    weight = bells[0][:, :, None] * bells[1][:, None, :]
    return np.asarray(np.sqrt((weight * (patch - mirror) ** 2).sum(axis=(1, 2)) / weight.sum(axis=(1, 2))))


def _kernels(
    offsets: NDArray[np.int64], shift: FloatArray, sigma: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Gaussian about each shift and its first two derivatives after the shift."""
    t = (offsets[None, :] - shift[:, None]) / sigma
    bell = np.exp(-0.5 * t * t)
    return bell, bell * t / sigma, bell * (t * t - 1) / sigma**2
