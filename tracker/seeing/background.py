"""Still picture behind the droplets: glare, its smooth part, and the shade of the reticle's dark lines."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

F32 = NDArray[np.float32]
Pictures = Sequence[NDArray[Any]] | NDArray[Any]  # of one size

_LOW = 0.3  # quantile that a droplet in place for half the samples hardly moves
_CLIP = 2.0  # samples within so many standard deviations make the mean
_BRIGHT, _MOST_BRIGHT = 2.0, 8.0  # times the noise around, of bright pixels, with what a codec adds there
_BRIGHT_SHARE = 0.2  # of their rise over what is around; more is a droplet on the move
_LINE_SCALE = 14.0  # px, standard deviation of the smoothing that separates glare from lines
_MOST_LINES = 0.4  # of the picture; more is no reticle but an uneven background
_LINE_ROUNDS = 6
_LINE_DEPTH = 0.93  # shade below this is a line
_RESTLESS = 4.0  # times the usual median deviation from the background
_RESTLESS_SHARE = (
    0.1  # of the background's rise thereabouts: a bright pixel has more noise, and a codec adds to it
)
_LEAST_RESTLESS = 0.4  # grey, for that median deviation: what a codec holds still deviates by less
_MOST_RESTLESS = 0.2  # of the picture; more is a change of light
_STRIP_BYTES = 65_536  # of each sample that are sorted at once
_MIN_TEMPORAL = 12  # fewer samples cannot tell a droplet from glare in time


@dataclass(frozen=True, slots=True)
class Background:
    """What the picture shows without droplets."""

    level: F32  # (height, width) grey
    shade: F32  # (height, width) share of light that passes the reticle's dark lines, 1 off the lines
    variance: float  # of `level` through the finite number of samples, as a share of a pixel's variance
    samples: int
    line_share: float  # share of the picture under dark lines


def find_background(samples: NDArray[Any], *, black: float) -> Background:
    """Estimate the still background from pictures taken at different times.

    Parameters
    ----------
    samples : ndarray of shape (n, height, width), uint8 or uint16
        Pictures of one level of illumination.
    black : float
        Grey value of no light.

    Returns
    -------
    background : Background
        From a low quantile in time and the mean of the samples about it; from the picture's own surroundings
        where there are too few samples.
    """
    if len(samples) >= _MIN_TEMPORAL:
        level = temporal_level(samples)
        variance = 1.3 / len(samples)  # variance of a mean clipped at 2 standard deviations
    else:
        level = spatial_level(samples.mean(0, dtype=np.float32))
        variance = 0.0
    shade, share = find_shade(level, black)
    return Background(level, shade, variance, len(samples), share)


def temporal_level(samples: NDArray[Any]) -> F32:
    """Mean in time of the samples that show the background and no droplet."""
    n = len(samples)
    low, lower = round(_LOW * (n - 1)), max(0, round(0.08 * (n - 1)))
    at_lower, at_low = ranks_in_time(samples, (lower, low))
    centre = at_low.astype(np.float32)
    spread = centre - at_lower
    # Both quantiles at the ranks that were taken, so that the offset is right for any number of samples.
    z_low, z_lower = _z((low + 0.625) / (n + 0.25)), _z((lower + 0.625) / (n + 0.25))
    sigma = np.maximum(_local_mean(spread, 31) / np.float32(z_low - z_lower), _change_sigma(samples))
    own = _local_mean(spread, 3) / np.float32(z_low - z_lower)
    bright = (own > _BRIGHT * sigma) & (own < _MOST_BRIGHT * sigma) & (own < _BRIGHT_SHARE * _rise(centre, 8))
    sigma = np.where(bright, own, sigma)
    centre -= z_low * sigma
    half = _CLIP * sigma + 0.5
    total, count = np.zeros(centre.shape, np.float32), np.zeros(centre.shape, np.float32)
    bottom, top = centre - half, centre + half
    if samples.dtype.kind == "u":
        most = np.iinfo(samples.dtype).max
        bottom = np.clip(np.ceil(bottom), 0, most).astype(samples.dtype)
        top = np.clip(np.floor(top), 0, most).astype(samples.dtype)
    for picture in samples:
        inside = cv2.inRange(picture, bottom, top)  # 255 where it is
        cv2.accumulate(picture, total, mask=inside)
        cv2.accumulate(inside, count)
    return np.where(count > 0, 255 * total / np.maximum(count, 1), centre).astype(np.float32)


def _change_sigma(samples: NDArray[Any]) -> float:
    """Noise of a pixel from the changes between samples; where black is cut off, low values in time hide it."""
    chosen = samples[:: max(1, len(samples) // 9), ::5, ::5].astype(np.float32)
    return max(float(np.abs(np.diff(chosen, axis=0)).mean(0).mean()) / 1.1284 * 0.9, 0.3)  # 2 / sqrt(pi)


def ranks_in_time(samples: Pictures, ranks: tuple[int, ...]) -> list[NDArray[Any]]:
    """Each pixel's samples of the given ranks in increasing order, 0 the lowest; by strips, to need little memory."""
    height, width = samples[0].shape
    found = [np.empty_like(samples[0]) for _ in ranks]
    step = max(1, _STRIP_BYTES // (width * samples[0].itemsize))
    for top in range(0, height, step):
        planes = [s[top : top + step] for s in samples]
        for a, b, low, high in _network(len(planes), ranks):
            first, second = planes[a], planes[b]
            if low:
                planes[a] = np.minimum(first, second)
            if high:
                planes[b] = np.maximum(first, second)
        for picture, rank in zip(found, ranks, strict=True):
            picture[top : top + step] = planes[rank]
    return found


@lru_cache(maxsize=16)
def _network(n: int, ranks: tuple[int, ...]) -> tuple[tuple[int, int, bool, bool], ...]:
    """Comparisons (a, b, whether the lower, the higher is wanted) that bring the given ranks of n to their places.

    Batcher's odd-even merge sort (K. E. Batcher, AFIPS Conf. Proc. 32 (1968) 307), without what no rank needs.
    """
    pairs = []
    p = 1
    while p < n:
        k = p
        while k >= 1:
            starts = [i + j for j in range(k % p, n - k, 2 * k) for i in range(min(k, n - j - k))]
            pairs += [(a, a + k) for a in starts if a // (2 * p) == (a + k) // (2 * p)]
            k //= 2
        p *= 2
    needed, kept = set(ranks), []
    for a, b in reversed(pairs):
        if a in needed or b in needed:
            kept.append((a, b, a in needed, b in needed))
            needed |= {a, b}
    return tuple(reversed(kept))


def spatial_level(picture: F32, *, size: int = 41) -> F32:
    """Smooth surroundings of each pixel, spots left out: a masked mean that drops what lies above it."""
    level: NDArray[Any] = _local_mean(picture, size)
    for _ in range(4):
        above = picture - level
        sigma = spread_of(above)
        mask = (np.abs(above) < 2.5 * max(sigma, 1e-3)).astype(np.float32)
        share = np.maximum(_local_mean(mask, size), np.float32(1e-3))
        level = _local_mean(picture * mask, size) / share
    return level


def find_shade(level: F32, black: float) -> tuple[F32, float]:
    """Split the background into smooth glare and the shade of dark lines.

    Returns
    -------
    shade : ndarray
        Share of light that passes, 1 off the lines.
    share : float
        Of the picture that lies under lines.

    Notes
    -----
    A dark line dims the glare and a droplet behind it alike. The smooth part is a Gaussian mean over the
    pixels that are near it.
    """
    light = np.maximum(level - black, 1e-3)
    smooth = _glare(light)
    ratio = np.minimum(light / smooth, 1).astype(np.float32)
    line: NDArray[Any] = ((ratio < _LINE_DEPTH) & (smooth - light > 1.5)).astype(np.uint8)
    line = cv2.morphologyEx(line, cv2.MORPH_CLOSE, np.ones((3, 3), np.uint8))
    line = _long_parts(line)
    if line.mean() > _MOST_LINES:
        return np.ones_like(ratio), 0.0
    near = cv2.dilate(line, np.ones((5, 5), np.uint8)).astype(bool)
    shade = np.where(near, ratio, np.float32(1)).astype(np.float32)
    return np.maximum(shade, 0.02), float(line.mean())


def fill_restless(background: Background, samples: NDArray[Any], *, width: float, black: float) -> Background:
    """Replace places that are occupied most of the time by something that moves.

    Parameters
    ----------
    background : Background
        From `find_background`.
    samples : ndarray of shape (n, height, width)
        The same pictures.
    width : float
        Standard deviation of a spot in px.
    black : float
        Grey value of no light.

    Returns
    -------
    background : Background
        With the smooth surroundings there; the same object if there is no such place.

    Notes
    -----
    Glare is there in every sample, and a droplet that passes is there in few. Where half of the samples differ from
    the background by several times the noise, something slow has been taken for background.
    """
    if background.samples < _MIN_TEMPORAL:
        return background
    step = max(1, round(width))
    height, breadth = background.level.shape
    size = (max(1, breadth // step), max(1, height // step))
    some = samples[:: max(1, len(samples) // 24)]
    rest = [cv2.resize(np.abs(_local_mean(p - background.level, 2 * step + 1)), size) for p in some]
    (usual,) = ranks_in_time(rest, (len(rest) // 2,))
    rise = cv2.resize(_rise(background.level, 8 * step), size)
    least = np.maximum(_RESTLESS * max(float(np.median(usual)), _LEAST_RESTLESS), _RESTLESS_SHARE * rise)
    restless: NDArray[Any] = (usual > least).astype(np.uint8)
    restless = cv2.morphologyEx(restless, cv2.MORPH_OPEN, np.ones((2, 2), np.uint8))
    share = float(restless.mean())
    if not 0 < share < _MOST_RESTLESS:
        return background
    reach = 2 * math.ceil(4 * width / step) + 1
    wide = cv2.dilate(restless, cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (reach, reach)))
    mask = cv2.resize(wide, (breadth, height), interpolation=cv2.INTER_NEAREST).astype(bool)
    free = (~mask).astype(np.float32)
    weight = cv2.GaussianBlur(free, (0, 0), 6 * width)
    around = cv2.GaussianBlur(background.level * free, (0, 0), 6 * width) / np.maximum(weight, 1e-3)
    level = np.where(mask & (weight > 0.01), around, background.level).astype(np.float32)
    shade, lines = find_shade(level, black)
    return Background(level, shade, background.variance, background.samples, lines)


def _glare(light: F32) -> F32:
    """Smooth part of the background, from the pixels near it; at a quarter of the size."""
    height, width = light.shape
    size = (max(1, -(-width // 4)), max(1, -(-height // 4)))
    smooth: NDArray[Any] = light
    mask: NDArray[Any] = np.ones(light.shape, np.float32)
    for _ in range(_LINE_ROUNDS):
        share, part = (cv2.resize(a, size, interpolation=cv2.INTER_AREA) for a in (mask, mask * light))
        share, part = (cv2.GaussianBlur(a, (0, 0), _LINE_SCALE / 4) for a in (share, part))
        smooth = cv2.resize(part / np.maximum(share, 1e-3), (width, height), interpolation=cv2.INTER_LINEAR)
        mask = (np.abs(light - smooth) <= np.maximum(1.5, 0.06 * smooth)).astype(np.float32)
    return np.asarray(smooth, np.float32)


def _long_parts(line: NDArray[Any]) -> NDArray[Any]:
    """Parts of a mask that are longer than 25 px: lines and figures of a reticle, not specks of noise."""
    count, labels, stats, _ = cv2.connectedComponentsWithStats(line, connectivity=8)
    long = np.maximum(stats[:, cv2.CC_STAT_WIDTH], stats[:, cv2.CC_STAT_HEIGHT]) > 25
    long[0] = False
    return long[labels].astype(np.uint8) if count > 1 else line


def _rise(level: F32, size: int) -> NDArray[Any]:
    """Highest rise of a picture over its surroundings within half of `size` px."""
    rise = level - _local_mean(level, size + 1)
    return np.asarray(cv2.dilate(rise, np.ones((size + 1, size + 1), np.uint8)))


def spread_of(values: NDArray[Any]) -> float:
    """Standard deviation from the median absolute deviation."""
    return 1.4826 * float(np.median(np.abs(values - np.median(values))))


def _local_mean(picture: F32, size: int) -> F32:
    """Mean over a square, reflected at the edges."""
    return np.asarray(cv2.blur(picture, (size, size), borderType=cv2.BORDER_REFLECT), np.float32)


def _z(share: float) -> float:
    """Quantile of the standard normal distribution."""
    from statistics import NormalDist

    return NormalDist().inv_cdf(share)
