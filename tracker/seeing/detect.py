"""Frame -> candidates: matched filter, threshold from a stated false-alarm rate, local maxima."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from tracker.seeing.background import Background, Pictures, ranks_in_time
from tracker.seeing.fit import Windows

F32 = NDArray[np.float32]
Places = tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]
Candidates = tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]

_COARSE_WIDTH = 0.75  # px, least spot width after binning: costs 0.25 in signal to noise, saves two thirds
_MAX_BINNING = 8
_TILE = 32  # px, tiles on which the noise is measured
_RESTLESS_SAMPLES = 30  # fewer do not tell how restless one place is
_RESTLESS_DEPTH = (
    1.4  # standard deviations: quantile 0.12 lies at 1.17, and 2 % of places may exceed this by chance
)
_HEAVY = 1.1  # times the median deviation: a spread beyond it is one of flecks, which the median does not see
_TAIL = 30  # highest minima that tell the tail
_LEAST_TAIL = 8  # fewer tell nothing
_MOST_RAISED = 4.0  # times the threshold for white noise: more is something else than noise
_PULSE = 1.3  # times the usual spread of a picture: some sample beyond it, and pictures are judged one by one
_SPARSE = 3  # every third pixel and row tells a picture's spread


@dataclass(frozen=True, slots=True)
class Detector:
    """Matched filter of one recording, on pictures binned as far as the spot allows."""

    binning: int  # px of the recording to a px of the filtered picture, along each axis
    sigma: float  # px of the binned picture, width of the filter
    level: F32  # filtered background, binned
    inverse_noise: F32  # 1 / standard deviation of the filtered residual, binned
    bar: F32  # filtered picture at the threshold, binned; infinite at the rim
    kernel: F32  # one-dimensional
    threshold: float  # in standard deviations of the filtered residual
    usual_spread: float  # of pictures, as `spread_below` gives it; 0 where all have the same

    def candidates(self, pictures: Pictures) -> Candidates:
        """Local maxima above the threshold.

        Parameters
        ----------
        pictures : sequence of ndarray of shape (height, width)
            A batch.

        Returns
        -------
        frame : ndarray of shape (N,)
            Number of the picture in the batch, in increasing order.
        x, y : ndarray of shape (N,)
            px of the recording, from a parabola through the maximum and its neighbours.
        score : ndarray of shape (N,)
            Signal to noise after the filter.

        Notes
        -----
        Where pictures differ in noise, as key frames of some codecs do, each is measured by its own.
        """
        smooth = np.empty_like(self.level)
        flat, around = smooth.reshape(-1), _around(self.level.shape[1])
        above, hoods, spread = [], [], np.ones(len(pictures))
        for picture in pictures:
            _smooth(picture, self.binning, self.kernel, out=smooth)
            above.append(np.flatnonzero(smooth > self.bar))
            hoods.append(flat[above[-1][:, None] + around])
            if self.usual_spread:
                spread[len(hoods) - 1] = max(self._spread(smooth) / self.usual_spread, 1)
        frame = np.repeat(np.arange(len(pictures)), [len(a) for a in above])
        place = np.concatenate(above)
        near = place[:, None] + around
        hood = (np.concatenate(hoods) - self.level.reshape(-1)[near]) * self.inverse_noise.reshape(-1)[near]
        if self.usual_spread:
            hood /= spread[frame, None]
            high = hood[:, 4] > self.threshold
            frame, place, hood = frame[high], place[high], hood[high]
        return _peaks(frame, place, hood, width=self.level.shape[1], binning=self.binning)

    def _spread(self, smooth: F32) -> float:
        """How restless a filtered picture is against the others."""
        part = (slice(None, None, _SPARSE),) * 2
        return float(spread_below(((smooth[part] - self.level[part]) * self.inverse_noise[part])[None])[0])


def spread_below(stack: F32) -> NDArray[np.float64]:
    """Standard deviation of each picture about its median, from what lies below, where no bright droplet is.

    About the median, as a picture that is a little darker than the others has no more noise.
    """
    low = np.minimum(stack - np.median(stack, axis=(1, 2), keepdims=True), 0)
    return np.asarray(np.sqrt(2 * np.einsum("nij,nij->n", low, low) / low[0].size), np.float64)


def find_peaks(stack: F32, threshold: float) -> Candidates:
    """Pixels of pictures above `threshold` that are the highest of their 3 x 3; see `Detector.candidates`."""
    _, height, width = stack.shape
    flat = stack.reshape(-1)
    frame, place = np.divmod(np.flatnonzero(flat > threshold), height * width)
    row, column = np.divmod(place, width)
    inner = (row > 0) & (row < height - 1) & (column > 0) & (column < width - 1)
    frame, place = frame[inner], place[inner]
    hood = flat[(frame * height * width + place)[:, None] + _around(width)]
    return _peaks(frame, place, hood, width=width, binning=1)


def _around(width: int) -> NDArray[np.int64]:
    """Where the 3 x 3 around a pixel lie in a flat picture, row by row; the pixel itself is the fifth."""
    return np.add.outer(width * np.arange(-1, 2), np.arange(-1, 2)).reshape(-1)


def _peaks(
    frame: NDArray[np.int64], place: NDArray[np.int64], hood: F32, *, width: int, binning: int
) -> Candidates:
    """Those pixels that are the highest of their 3 x 3, with sub-pixel place and height."""
    value = hood[:, 4]
    top = (value[:, None] > hood[:, :4]).all(1) & (value[:, None] >= hood[:, 5:]).all(1)
    frame, place, hood = frame[top], place[top], hood[top]
    value = hood[:, 4]
    row, column = np.divmod(place, width)
    x = (column + _vertex(hood[:, 3], value, hood[:, 5])) * binning + (binning - 1) / 2
    y = (row + _vertex(hood[:, 1], value, hood[:, 7])) * binning + (binning - 1) / 2
    return frame, x, y, value.astype(np.float64)


def _vertex(before: F32, at: F32, after: F32) -> NDArray[np.float64]:
    """Place of a parabola's top between three values."""
    bend = np.minimum(before + after - 2.0 * at, -1e-6)
    return np.clip(0.5 * (before - after) / bend, -0.5, 0.5).astype(np.float64)


def _smooth(picture: NDArray[Any], binning: int, kernel: F32, *, out: F32 | None = None) -> F32:
    """Bin by means and convolve; sums of the kernel are 1."""
    if binning > 1:
        height, width = (s // binning for s in picture.shape)
        picture = cv2.resize(
            picture[: height * binning, : width * binning], (width, height), interpolation=cv2.INTER_AREA
        )
    result = cv2.sepFilter2D(picture, cv2.CV_32F, kernel, kernel, dst=out, borderType=cv2.BORDER_REFLECT)
    return np.asarray(result, np.float32)


def gaussian_kernel(sigma: float) -> F32:
    """Samples of a Gaussian of sum 1, out to 3 standard deviations."""
    reach = math.ceil(3 * sigma)
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    return np.asarray(kernel / kernel.sum(), np.float32)


def build_detector(
    samples: NDArray[Any], level: F32, *, width: float, false_alarms: float
) -> tuple[Detector, dict[str, float]]:
    """Set up the matched filter from sample pictures.

    Parameters
    ----------
    samples : ndarray of shape (n, height, width)
        Pictures of the recording.
    level : ndarray of shape (height, width)
        Background.
    width : float
        Standard deviation of a spot in px.
    false_alarms : float
        False sightings a frame that are accepted.

    Returns
    -------
    detector : Detector
    report : dict
        The threshold by theory and as found on the recording.

    Notes
    -----
    Noise is the spread of the *filtered* residual in tiles: compression removes fine noise but leaves the
    part that the filter passes. The threshold for white noise follows from the rate of maxima of a Gaussian
    random field; the recording's own minima, which no bright droplet makes, raise it where noise is not Gaussian.
    """
    binning = 1
    while width / (2 * binning) >= _COARSE_WIDTH and 2 * binning <= _MAX_BINNING:
        binning *= 2
    sigma = max(width / binning, 0.6)
    kernel = gaussian_kernel(sigma)
    smooth_level = _smooth(level, binning, kernel)
    stack = np.stack([_smooth(p, binning, kernel) for p in samples])
    stack -= smooth_level
    offset = np.float32(
        np.median(stack[:, ::_SPARSE, ::_SPARSE])
    )  # means of whole grey values are rounded up
    smooth_level += offset
    stack -= offset
    inverse = np.float32(1) / local_noise(stack, tile=max(8, _TILE // binning))
    stack *= inverse
    usual = _usual_spread(stack)
    if usual:
        spread = spread_below(stack[:, ::_SPARSE, ::_SPARSE])
        stack /= np.maximum(spread / usual, 1).astype(np.float32)[:, None, None]
    theory = threshold_for(false_alarms, float(smooth_level.size), sigma)
    found = min(_threshold_of_tail(stack, false_alarms), _MOST_RAISED * theory)
    threshold = max(theory, found)
    bar = smooth_level + np.float32(threshold) / inverse
    bar[[0, -1]] = bar[:, [0, -1]] = np.inf
    detector = Detector(binning, sigma, smooth_level, inverse, bar, kernel, threshold, usual)
    report = {"threshold": threshold, "threshold_white_noise": theory, "threshold_of_tail": found}
    return detector, {**report, "false_alarms_at_threshold": false_alarms}


def _usual_spread(stack: F32) -> float:
    """Median spread of the samples; 0 where all have nearly the same."""
    spread = spread_below(stack[:, ::_SPARSE, ::_SPARSE])
    usual = float(np.median(spread))
    return usual if spread.max() > _PULSE * usual else 0.0


def _of_tiles(values: F32, tile: int) -> F32:
    """Median of all pictures in each tile."""
    _, height, width = values.shape
    rows, columns = max(1, height // tile), max(1, width // tile)
    edges_y = np.linspace(0, height, rows + 1).astype(int)
    edges_x = np.linspace(0, width, columns + 1).astype(int)
    coarse = np.empty((rows, columns), np.float32)
    for i in range(rows):
        for j in range(columns):
            coarse[i, j] = np.median(values[:, edges_y[i] : edges_y[i + 1], edges_x[j] : edges_x[j + 1]])
    return coarse


def noise_map(stack: F32, *, tile: int) -> F32:
    """Standard deviation of the residual from its median absolute value in tiles, smooth between them.

    Where a codec leaves most of a tile as it was and puts flecks into the rest, the mean square of what lies below
    the background counts.
    """
    n, height, width = stack.shape
    coarse: NDArray[Any] = 1.4826 * _of_tiles(np.abs(stack[:: max(1, n // 12), ::2, ::2]), max(1, tile // 2))
    low = np.minimum(stack[:: max(1, n // 24)], 0)
    below = np.sqrt(2 * cv2.resize((low * low).mean(0), coarse.shape[::-1], interpolation=cv2.INTER_AREA))
    coarse = np.where(below > _HEAVY * coarse, below, coarse)
    coarse = np.maximum(coarse, max(float(np.median(coarse)) * 0.3, 1e-3))
    return np.asarray(cv2.resize(coarse, (width, height), interpolation=cv2.INTER_LINEAR), np.float32)


def local_noise(stack: F32, *, tile: int) -> F32:
    """Noise of tiles, and more where a place itself is more restless: edges of lines, flickering glare.

    A place is judged by how far its low values in time lie below the background, which no bright droplet changes.
    """
    smooth = noise_map(stack, tile=tile)
    if len(stack) < _RESTLESS_SAMPLES:
        return smooth
    (low,) = ranks_in_time(stack, (round(0.12 * (len(stack) - 1)),))
    own = cv2.blur(np.maximum(-low, 0), (3, 3)) / np.float32(_RESTLESS_DEPTH)
    return np.asarray(np.maximum(smooth, own), np.float32)


def false_alarm_rate(threshold: float, area: float, sigma: float) -> float:
    """Maxima above a threshold in white noise smoothed by a Gaussian, expected in an area.

    Notes
    -----
    R. J. Adler, The Geometry of Random Fields (1981), ch. 6: density of high maxima of a Gaussian field in the
    plane, lambda (2 pi)^(-3/2) u exp(-u^2/2), with the second spectral moment lambda = 1 / (2 sigma^2).
    """
    density: float = (2 * math.pi) ** -1.5 / (2 * sigma**2)
    return area * density * threshold * math.exp(-0.5 * threshold**2)


def threshold_for(rate: float, area: float, sigma: float) -> float:
    """Threshold in standard deviations at which `rate` false maxima are expected in an area; at least 2."""
    low, high = 1.0, 12.0
    while high - low > 1e-4:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if false_alarm_rate(middle, area, sigma) > rate else (low, middle)
    return max(2.0, high)


def _threshold_of_tail(stack: F32, rate: float) -> float:
    """Threshold at which the recording's own minima have the rate; 0 where there are none to count.

    The highest heights above some base fall off exponentially, whatever the noise is (J. Pickands, Annals of
    Statistics 3 (1975) 119, with shape 0); beyond the last one this goes on.
    """
    height = np.sort(find_peaks(-stack, 2.5)[3])[::-1][: _TAIL + 1]
    if len(height) <= _LEAST_TAIL:
        return 0.0
    base, count = float(height[-1]), len(height) - 1
    excess = float(height[:-1].mean()) - base
    return base + excess * max(math.log(count / (rate * len(stack))), 0.0)


def cut_windows(
    pictures: Pictures, at: Places, *, reach: int, background: Background, full_scale: float
) -> Windows:
    """Cut squares of side 2 reach + 1 around places; at the edge of the picture they are moved inward.

    Parameters
    ----------
    pictures : sequence of n ndarray of shape (height, width)
        A batch.
    at : tuple of three ndarray of shape (N,)
        Picture of the batch, x and y in px.
    reach : int
        px.
    background : Background
        Its level is taken off.
    full_scale : float
        Grey values from here on are marked bad.

    Returns
    -------
    windows : Windows
    """
    return windows_of(*cut_squares(pictures, at, reach=reach), background=background, full_scale=full_scale)


def cut_squares(
    pictures: Pictures, at: Places, *, reach: int
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[Any]]:
    """Left and top in px of the squares that `cut_windows` cuts, and their grey values as in the pictures."""
    frame, x, y = at
    side = 2 * reach + 1
    height, width = pictures[0].shape
    left = np.clip(np.rint(x).astype(np.int64) - reach, 0, width - side)
    top = np.clip(np.rint(y).astype(np.int64) - reach, 0, height - side)
    rows, columns = _pixels(left, top, side)
    raw = np.empty((len(x), side, side), pictures[0].dtype)
    order = np.argsort(frame, kind="stable")
    for chosen in np.split(order, np.flatnonzero(np.diff(frame[order])) + 1):
        if len(chosen):
            raw[chosen] = pictures[frame[chosen[0]]][rows[chosen], columns[chosen]]
    return left, top, raw


def windows_of(
    left: NDArray[np.int64], top: NDArray[np.int64], raw: NDArray[Any], *, background: Background, full_scale: float
) -> Windows:  # fmt: skip
    """Set up windows from squares that `cut_squares` gave."""
    rows, columns = _pixels(left, top, raw.shape[1])
    back = background.level[rows, columns]
    return Windows(left, top, raw - back, back, background.shade[rows, columns], raw >= full_scale)


def _pixels(
    left: NDArray[np.int64], top: NDArray[np.int64], side: int
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Rows (N, side, 1) and columns (N, 1, side) of squares."""
    at = np.arange(side)
    return (top[:, None] + at)[:, :, None], (left[:, None] + at)[:, None, :]
