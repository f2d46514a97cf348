"""Camera's noise from what fitted spots leave of their light."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.seeing.background import Background
from tracker.seeing.fit import Camera, Spots, Windows, profiles

F32 = NDArray[np.float32]
Float = NDArray[np.float64]

_FINE = (
    (2, 1),
    (1, 2),
    (2, 2),
    (3, 0),
    (0, 3),
    (3, 1),
    (1, 3),
)  # Hermite degrees along x and y, besides (1, 1)
_WHITE = (0.8, 1.3)  # variance of a pixel over that of the filtered noise: within, the noise is white
_HALF = 0.4549  # median of the square of a standard normal number
_MOST_SHARE = 0.75  # of the empty background's variance that shot noise may be in the weights
_LEAST_READ = 0.05
_CAMERA_BITS = (9, 10, 11, 12, 13, 14, 15)  # of cameras whose files have words of 16
_REPEATED = 8  # pixels of the samples at the largest value


def saturation(samples: NDArray[Any], stated: float) -> float:
    """Grey value from which on pixels are saturated.

    Parameters
    ----------
    samples : ndarray of shape (n, height, width)
        Pictures of the recording.
    stated : float
        The largest value that the file could hold.

    Returns
    -------
    full_scale : float
        `stated`, or the largest value of a camera with fewer bits than its file, in the lower or upper bits of a word,
        where the samples end exactly there and several pixels have it.
    """
    top = int(samples.max())
    ends = [(2**b - 1) << shift for b in _CAMERA_BITS for shift in (0, 16 - b)]
    if samples.dtype == np.uint16 and top in ends and np.count_nonzero(samples == top) >= _REPEATED:
        return float(min(top, stated))
    return stated


def find_camera(
    windows: Windows, spots: Spots, residual: F32, background: Background, first: Camera
) -> tuple[Camera, Camera]:
    """Read variance and gain from what fitted spots leave and from the empty background.

    Parameters
    ----------
    windows, spots
        Lone spots, fitted with free width.
    residual : ndarray of shape (n, height, width)
        Pictures less the background.
    background : Background
    first : Camera
        With the variance of the empty background as `read_variance` and no gain.

    Returns
    -------
    weights, noise : Camera
        For the weights of fits, with no more gain than the empty background allows; and as found, for standard
        deviations. They differ where a codec makes droplets noisier than the background.

    Notes
    -----
    Each spot's residual is projected on patterns H_a(u) H_b(v) g(u) g(v) with Hermite polynomials, which no fitted
    parameter touches: the square has the mean sum T^2 (read^2 + gain * grey). The gain is that at which the median of
    square over mean is right. In white noise several patterns tell it; after compression only the coarsest, which
    has the fineness of a shift of the spot.
    """
    pixel = (1.4826 * float(np.median(np.abs(residual[:, ::3, ::3])))) ** 2
    empty = first.read_variance
    white = _WHITE[0] < pixel / empty < _WHITE[1]
    base = max(float(np.median(background.level)) - first.black, 0.0)
    square, power, excess = _projections(
        windows, spots, ((1, 1), *(_FINE if white else ())), first.black + base
    )
    gain = _gain_of_median(square, empty * power, excess)
    true = Camera(max(empty - gain * base, _LEAST_READ * empty), gain, first.black, first.full_scale)
    gain = min(gain, _MOST_SHARE * empty / base if base > 0 else gain)
    return Camera(empty - gain * base, gain, first.black, first.full_scale), true


def _projections(
    windows: Windows, spots: Spots, degrees: tuple[tuple[int, int], ...], ground: float
) -> tuple[Float, Float, Float]:
    """Squares of the projections, sums of the squared patterns, and those times the light over `ground`."""
    p = np.stack(
        [spots.amplitude, spots.x - windows.left, spots.y - windows.top, np.log(spots.sx), np.log(spots.sy)],
        1,
    )
    u, v, gx, gy = profiles(p, windows.grey.shape[1])
    shape = gy[:, :, None] * gx[:, None, :] * windows.shade
    model = shape * spots.amplitude[:, None, None].astype(np.float32)
    left = windows.grey - model
    light = windows.background + model - np.float32(ground)
    columns = []
    for a, b in degrees:
        pattern = np.where(windows.bad, 0, shape * _hermite(a, u)[:, None, :] * _hermite(b, v)[:, :, None])
        weight = pattern * pattern
        columns.append(
            [
                (left * pattern).sum((1, 2), dtype=np.float64) ** 2,
                weight.sum((1, 2)),
                (light * weight).sum((1, 2)),
            ]
        )
    square, power, excess = (np.concatenate([c[i] for c in columns]).astype(np.float64) for i in range(3))
    return square, power, excess


def _hermite(degree: int, u: F32) -> F32:
    """Polynomials that are orthogonal under exp(-u^2)."""
    return (np.ones_like(u), u, u * u - np.float32(0.5), u * (u * u - np.float32(1.5)))[degree]


def _gain_of_median(square: Float, empty: Float, excess: Float) -> float:
    """Gain at which the median of square / (empty + gain * excess) is that of a normal number's square.

    Spots that the gain hardly touches are left out; the median does not mind a neighbour in a few windows.
    """
    telling = excess > 0.5 * np.quantile(excess, 0.8)
    square, empty, excess = square[telling], empty[telling], excess[telling]
    low, high = 0.0, 1e3 * float(np.median(empty / excess))
    if np.median(square / empty) <= _HALF:
        return 0.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if np.median(square / (empty + middle * excess)) > _HALF else (low, middle)
    return high
