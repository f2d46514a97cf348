"""Ruled lines in a picture: their directions, and where they are, to a few hundredths of a pixel.

A family of parallel lines is looked at in strips along it: the picture is turned so that the lines stand upright,
and a few dozen rows are averaged to one profile. A curved or fanning line is straight within a strip.
"""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

MOST_STRIPS = (
    64  # of a large picture; more would sharpen nothing that the pattern's tolerance has not blunted
)
STRIP_ROWS = 32  # long enough to average noise, short enough that a line that leans by 1 degree stays sharp


@dataclass(frozen=True, slots=True)
class LinePoints:
    """Places on the lines of one family, one for each line and strip."""

    x: FloatArray  # px
    y: FloatArray  # px
    across: FloatArray  # px along the direction across the lines
    along: FloatArray  # px along the lines
    contrast: FloatArray  # grey values of the line above its surroundings
    pitch: float  # px, first estimate
    angle: float  # rad, of the direction across the lines, from +x toward +y, in [0, pi)
    width: float  # px, standard deviation of the kernel that fits the lines
    strips: int  # strips that the picture has along the lines
    continuity: float  # 1: the lines are unbroken; near 0: they are rows of dots
    levels: tuple[float, float]  # usual grey value on the lines, and between them


def flatten(picture: NDArray[np.float32]) -> NDArray[np.float32]:
    """Take out uneven light.

    Parameters
    ----------
    picture : ndarray of float32
        Grey values.

    Returns
    -------
    flat : ndarray of float32
        Grey values over the light's own level, less 1: light multiplies what it falls on, so a slope of it, which
        would shift every line and dot, is divided out. Where the ground is nearly black the level is taken off.

    Notes
    -----
    The level is a polynomial of fourth degree, fitted with Tukey's weights (A. E. Beaton and J. W. Tukey,
    Technometrics 16 (1974), 147-185) to the picture made small, so that lines and debris do not pull at it.
    """
    height, width = picture.shape
    step = max(1, max(height, width) // 128)
    small = cv2.resize(picture, (width // step, height // step), interpolation=cv2.INTER_AREA).astype(
        np.float64
    )
    rows, columns = small.shape
    ty, tx = np.linspace(-1, 1, rows), np.linspace(-1, 1, columns)
    powers = [(n, m) for n in range(5) for m in range(5 - n)]
    basis = np.stack([np.outer(ty**n, tx**m).ravel() for n, m in powers], axis=1)
    weight = np.ones(small.size)
    for _ in range(8):
        root = np.sqrt(weight)[:, None]
        terms = np.linalg.lstsq(basis * root, small.ravel() * root[:, 0], rcond=None)[0]
        off = small.ravel() - basis @ terms
        spread = max(float(np.median(np.abs(off))) * 1.4826, 1e-6 * float(np.ptp(small)), 1e-12)
        weight = np.clip(1 - (off / (4.685 * spread)) ** 2, 0, None) ** 2 + 1e-6
    fy, fx = np.linspace(-1, 1, height), np.linspace(-1, 1, width)
    table = np.zeros((5, 5))
    for (n, m), term in zip(powers, terms, strict=True):
        table[n, m] = term
    level = (np.vander(fy, 5, increasing=True) @ table @ np.vander(fx, 5, increasing=True).T).astype(
        np.float32
    )
    reach = float(np.ptp(np.percentile(small, [1, 99])))
    if level.min() > 0.1 * reach:
        return np.asarray(picture / level - 1, dtype=np.float32)
    return np.asarray((picture - level) / max(reach, 1e-9), dtype=np.float32)


def line_directions(flat: NDArray[np.float32], *, most: int = 3) -> list[float]:
    """Find the directions across the lines that a picture may hold, the strongest first.

    Parameters
    ----------
    flat : ndarray of float32
        Flattened picture.
    most : int, optional
        At most so many.

    Returns
    -------
    angles : list of float
        In rad in [0, pi), from +x toward +y.

    Notes
    -----
    Peaks of the histogram of gradient directions, weighted with the squared gradient, over the level that noise
    and debris give to all directions alike.
    """
    # Of a large picture, bands of 128 rows that hold three million pixels are looked at.
    step = 128 * max(1, round(flat.size / 3e6))
    histogram = np.sum(
        [_gradient_histogram(flat[top : top + 128]) for top in range(0, flat.shape[0], step)], axis=0
    )
    kernel = np.exp(-0.5 * (np.arange(-8, 9) / 3.0) ** 2)
    smoothed = np.convolve(
        np.concatenate([histogram[-8:], histogram, histogram[:8]]), kernel / kernel.sum(), "valid"
    )
    level = np.median(smoothed)
    peak = (smoothed >= np.roll(smoothed, 1)) & (smoothed > np.roll(smoothed, -1)) & (smoothed > 1.15 * level)
    found: list[float] = []
    for place in sorted(np.flatnonzero(peak), key=lambda n: -smoothed[n]):
        window = np.arange(place - 6, place + 7)
        weight = np.clip(smoothed[window % 360] - level, 0, None)
        angle = float(np.deg2rad(((window + 0.5) * weight).sum() / weight.sum() / 2) % np.pi)
        if all(abs((angle - other + np.pi / 2) % np.pi - np.pi / 2) > np.deg2rad(12) for other in found):
            found.append(angle)
    return found[:most]


def _gradient_histogram(band: NDArray[np.float32]) -> FloatArray:
    """Squared gradient over its direction, in half degrees from 0 to 180."""
    smooth = cv2.GaussianBlur(band, (0, 0), 1.2)
    gx, gy = cv2.Sobel(smooth, cv2.CV_32F, 1, 0, ksize=3), cv2.Sobel(smooth, cv2.CV_32F, 0, 1, ksize=3)
    power = (gx**2 + gy**2).ravel()
    # Debris is few pixels of large gradient; past the 99.5th percentile a pixel counts as much as one at it.
    power = np.minimum(power, np.percentile(power[:: max(1, power.size // 50_000)], 99.5))
    bins = (cv2.phase(gx, gy).ravel() * (360 / np.pi)).astype(np.int32) % 360
    return np.bincount(bins, weights=power, minlength=360).astype(np.float64)


def without_debris(flat: NDArray[np.float32], *, mark: float, ground: float) -> NDArray[np.float32]:
    """Cut grey values off beyond those of marks and ground, so that droplets and dust weigh little.

    Parameters
    ----------
    flat : ndarray of float32
        Flattened picture.
    mark, ground : float
        Usual value on the lines or dots, and between them.

    Returns
    -------
    cut : ndarray of float32
        Values outside the range by more than three times the pixel noise are set to that limit. What is symmetric
        about a line or dot stays so.
    """
    noise = 1.4826 / np.sqrt(2) * float(np.median(np.abs(np.diff(flat[:: 1 + flat.shape[0] // 500], axis=1))))
    return np.clip(flat, min(mark, ground) - 3 * noise, max(mark, ground) + 3 * noise)


def line_points(flat: NDArray[np.float32], angle: float, *, careful: bool = False) -> LinePoints | None:
    """Locate the lines of one direction.

    Parameters
    ----------
    flat : ndarray of float32
        Flattened picture.
    angle : float
        Direction across the lines in rad.
    careful : bool, optional
        True averages the middle half of the rows in each strip only, which debris does not reach.

    Returns
    -------
    points : LinePoints or None
        None if the profiles across this direction repeat nowhere.
    """
    turning = _turning(angle)
    rows = min(STRIP_ROWS, max(4, min(flat.shape) // 8))
    stack, mask, first_row, back = _strips(flat, turning, rows)
    _straighten(stack, lean=float(np.tan(angle - turning)))
    profiles = _average(stack, trim=careful)
    even = np.where(mask, profiles - _level(profiles, mask), 0.0)
    repeat = _repeat(even, mask)
    if repeat is None:
        return None
    pitch, half_width = repeat
    sigma = float(np.clip(0.8 * half_width, 0.8, pitch / 4.5))
    sign = _polarity(even, mask, sigma)
    profiles = np.where(mask, profiles, 0.0)
    strip, column, contrast = _peaks(sign * profiles, mask, sigma=sigma, pitch=pitch)
    if len(strip) < 4:
        return None
    slope = _ground_slope(sign * profiles, mask, strip, column, half=pitch / 2, least=2.5 * sigma)
    place, fine = refine_profile(sign * profiles, mask, strip, column, sigma=sigma, slope=slope)
    strip, place, contrast = strip[fine], place[fine], contrast[fine]
    middle = first_row[strip] + (rows - 1) / 2
    x = back[0, 0] * place + back[0, 1] * middle + back[0, 2]
    y = back[1, 0] * place + back[1, 1] * middle + back[1, 2]
    levels, unbroken = _along(stack, strip, place, pitch=pitch)
    return LinePoints(x, y, place, middle, contrast, pitch, angle, sigma, len(profiles), unbroken, levels)


def _turning(angle: float) -> float:
    """Angle to turn by: lines within 3 degrees of the pixel rows or columns are left as they are.

    OpenCV rounds places to 1/32 px. Along a line that is turned by many degrees this averages out; along one that
    is turned by one degree, it does not. `_strips` straightens such lines instead.
    """
    upright = round(angle / (np.pi / 2)) * (np.pi / 2)
    return upright if abs(angle - upright) < np.deg2rad(3) else angle


def _strips(
    flat: NDArray[np.float32], angle: float, rows: int
) -> tuple[NDArray[np.float32], NDArray[np.bool_], NDArray[np.int64], FloatArray]:
    """Cut the picture, turned so that the direction `angle` is +x, into strips of some rows.

    Gives the strips (strip, row, column), where their columns lie in the picture with all rows, the first row of each,
    and the way from a place (column, row) in the turned picture back to the picture.
    """
    height, width = flat.shape
    c, s = np.round([np.cos(angle), np.sin(angle)], 15)
    corners = np.array([[0, 0], [width - 1, 0], [0, height - 1], [width - 1, height - 1]]) @ [[c, -s], [s, c]]
    low = np.floor(corners.min(axis=0))
    size = np.ceil(corners.max(axis=0) - low).astype(int) + 1
    back = np.array([[c, -s, c * low[0] - s * low[1]], [s, c, s * low[0] + c * low[1]]])
    count = max(1, int(size[1]) // rows)
    first_row = rows * np.unique(np.linspace(0, count - 1, min(count, MOST_STRIPS)).round().astype(np.int64))
    stack = np.empty((len(first_row), rows, int(size[0])), dtype=np.float32)
    way = cv2.INTER_CUBIC | cv2.WARP_INVERSE_MAP
    for n, row in enumerate(first_row):
        there = back + np.array([[0, 0, back[0, 1] * row], [0, 0, back[1, 1] * row]])
        shape = stack.shape[2], rows
        stack[n] = cv2.warpAffine(flat, there, shape, flags=way, borderMode=cv2.BORDER_REPLICATE)
    inside = np.ones((len(first_row), stack.shape[2]), dtype=bool)
    u = np.arange(stack.shape[2])[None, :]
    for row in (0, rows - 1):  # the picture is convex: what holds for the outer rows holds between them
        v = (first_row + row)[:, None]
        x, y = (back[k, 0] * u + back[k, 1] * v + back[k, 2] for k in (0, 1))
        inside &= (x > -0.5) & (x < width - 0.5) & (y > -0.5) & (y < height - 0.5)
    return stack, inside, first_row, back


def _straighten(stack: NDArray[np.float32], *, lean: float) -> None:
    """Move the rows of each strip, in place, so that lines which lean (px per row) stand upright in it."""
    rows = stack.shape[1]
    for row in range(rows):
        shift = lean * (row - (rows - 1) / 2)
        if shift:
            weights = _cubic(-shift)[None, :]
            stack[:, row] = cv2.filter2D(stack[:, row].copy(), -1, weights, borderType=cv2.BORDER_REPLICATE)


def _average(stack: NDArray[np.float32], *, trim: bool) -> FloatArray:
    """Average the rows of each strip, or with `trim` the middle half of their values in each column."""
    if trim:
        rows = stack.shape[1]
        low, high = rows // 4, rows - 1 - rows // 4
        stack = np.partition(stack, (low, high), axis=1)[:, low : high + 1]
    return np.asarray(stack.mean(axis=1, dtype=np.float64))


def _cubic(shift: float) -> FloatArray:
    """Weights of the neighbours that give a row's values `shift` px to the right, by cubic convolution.

    R. G. Keys, IEEE Trans. Acoust. Speech Signal Process. 29 (1981), 1153-1160, with a = -1/2.
    """
    reach = int(np.ceil(abs(shift))) + 2
    t = np.abs(np.arange(-reach, reach + 1) - shift)
    near = 1.5 * t**3 - 2.5 * t**2 + 1
    far = -0.5 * t**3 + 2.5 * t**2 - 4 * t + 2
    return np.asarray(np.where(t <= 1, near, np.where(t < 2, far, 0.0)))


def _smooth(profiles: FloatArray, sigma: float) -> FloatArray:
    """Smooth each profile with a Gaussian."""
    size = (2 * int(np.ceil(4 * sigma)) + 1, 1)
    return np.asarray(
        cv2.GaussianBlur(profiles, size, sigma, borderType=cv2.BORDER_REPLICATE), dtype=np.float64
    )


def _level(profiles: FloatArray, mask: NDArray[np.bool_]) -> FloatArray:
    """Smooth level of each profile over its valid part, wide against any pitch that is allowed."""
    strips, columns = profiles.shape
    wide = max(8.0, float(mask.sum(axis=1).max()) / 4)
    small = max(2, round(8 * columns / wide)), strips
    sums = [
        _smooth(np.asarray(cv2.resize(v, small, interpolation=cv2.INTER_AREA), dtype=np.float64), 8.0)
        for v in (np.where(mask, profiles, 0.0), mask.astype(np.float64))
    ]
    level = cv2.resize(sums[0] / np.maximum(sums[1], 1e-6), (columns, strips), interpolation=cv2.INTER_LINEAR)
    return np.asarray(level, dtype=np.float64)


def _repeat(profiles: FloatArray, mask: NDArray[np.bool_]) -> tuple[float, float] | None:
    """Distance at which the profiles repeat and half the width of what repeats, from their autocorrelation."""
    size = 1 << int(2 * profiles.shape[1] - 1).bit_length()
    power = (np.abs(np.fft.rfft(profiles, size, axis=1)) ** 2).sum(axis=0)
    shared = (np.abs(np.fft.rfft(mask.astype(float), size, axis=1)) ** 2).sum(axis=0)
    longest = int(mask.sum(axis=1).max() * 0.55)
    overlap = np.maximum(np.fft.irfft(shared, size)[: longest + 1], 1.0)
    curve = np.fft.irfft(power, size)[: longest + 1] / overlap
    if longest < 8 or curve[0] <= 0:
        return None
    # White noise stands in the first value only; the second and third give what is left without it.
    curve[0] = max(curve[1] + (curve[1] - curve[2]) / 3, curve[1])
    if curve[0] <= 0:
        return None
    curve = curve / curve[0]
    top = np.flatnonzero((curve[1:-1] >= curve[:-2]) & (curve[1:-1] > curve[2:])) + 1
    # A repeat stands out from the lags up to half of it shorter and longer.
    stands = [curve[n] - max(curve[n // 2 : n].min(), curve[n : n + n // 2 + 1].min()) > 0.06 for n in top]
    peaks = top[np.array(stands, dtype=bool) & (top >= 4)]
    heights = curve[peaks]
    if len(peaks) == 0 or heights.max() < 0.08:
        return None
    # Long lines at every fifth place may repeat nearly three times as strongly as all lines do.
    first = int(peaks[heights >= 0.35 * heights.max()][0])
    below = np.flatnonzero(curve < 0.5 * (1 + curve[: first + 1].min()))
    return _vertex(curve, first), float(below[0]) if len(below) else first / 4


def _vertex(curve: FloatArray, n: int) -> float:
    """Place of the maximum of a sampled curve near sample n, from a parabola."""
    if not 0 < n < len(curve) - 1:
        return float(n)
    left, mid, right = curve[n - 1], curve[n], curve[n + 1]
    bend = left - 2 * mid + right
    return float(n + (0.5 * (left - right) / bend if bend < 0 else 0.0))


def _polarity(profiles: FloatArray, mask: NDArray[np.bool_], sigma: float) -> float:
    """Give +1 for bright lines, -1 for dark ones: lines are narrower than the gaps between them."""
    values = _smooth(profiles, max(0.6, 0.5 * sigma))[mask]
    spread = np.clip(values - np.median(values), *np.percentile(values - np.median(values), [0.5, 99.5]))
    return 1.0 if float(((spread - spread.mean()) ** 3).mean()) >= 0 else -1.0


def _peaks(
    profiles: FloatArray, mask: NDArray[np.bool_], *, sigma: float, pitch: float
) -> tuple[NDArray[np.int64], NDArray[np.int64], FloatArray]:
    """Local maxima that stand out from the gaps half a pitch to both sides: strip, column, contrast."""
    smooth = _smooth(profiles, sigma)
    smooth = np.where(mask, smooth, -np.inf)
    top = np.zeros(mask.shape, dtype=bool)
    top[:, 1:-1] = (smooth[:, 1:-1] >= smooth[:, :-2]) & (smooth[:, 1:-1] > smooth[:, 2:]) & mask[:, 1:-1]
    strip, column = np.nonzero(top)
    half = max(2, round(pitch / 2))
    gaps = []
    for side in (-half, half):
        at = column + side
        inside = (at >= 0) & (at < mask.shape[1])
        at = np.clip(at, 0, mask.shape[1] - 1)
        gaps.append(np.where(inside & mask[strip, at], smooth[strip, at], np.nan))
    known = np.isfinite(gaps[0]) | np.isfinite(gaps[1])
    strip, column = strip[known], column[known]
    contrast = smooth[strip, column] - np.nanmax(np.array(gaps)[:, known], axis=0)
    if len(contrast) == 0:
        return strip, column, contrast
    # The strongest tenth are lines (if there are any); a quarter of their contrast separates lines from dirt.
    keep = contrast > 0.25 * np.percentile(contrast, 90)
    return strip[keep], column[keep], contrast[keep]


def _ground_slope(
    profiles: FloatArray,
    mask: NDArray[np.bool_],
    strip: NDArray[np.int64],
    column: NDArray[np.int64],
    *,
    half: float,
    least: float,
) -> FloatArray:
    """Slope of the ground under each line, from the middles of the gaps to both sides.

    Near the picture's edge it is taken closer to the line, down to a distance `least`; NaN where that is cut too.
    """
    smooth = _smooth(np.where(mask, profiles, 0.0), max(0.5, half / 6)) / np.maximum(
        _smooth(mask.astype(float), max(0.5, half / 6)), 1e-6
    )
    slope = np.full(len(column), np.nan)
    for reach in (half, max(0.6 * half, least), min(half, least)):
        levels = []
        for side in (-reach, reach):
            at = column + side
            low = np.floor(at).astype(int)
            inside = (low >= 0) & (low + 1 < mask.shape[1])
            low = np.clip(low, 0, mask.shape[1] - 2)
            part = at - np.floor(at)
            level = (1 - part) * smooth[strip, low] + part * smooth[strip, low + 1]
            levels.append(np.where(inside & mask[strip, low] & mask[strip, low + 1], level, np.nan))
        slope = np.where(np.isfinite(slope), slope, (levels[1] - levels[0]) / (2 * reach))
    return slope


def refine_profile(
    profiles: FloatArray,
    mask: NDArray[np.bool_],
    strip: NDArray[np.int64],
    column: NDArray[np.int64],
    *,
    sigma: float,
    slope: FloatArray,
) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Place of each maximum of the smoothed profile, between the samples.

    Parameters
    ----------
    profiles : ndarray of shape (strips, columns)
        Bright lines.
    mask : ndarray of bool
        Where the profiles are valid.
    strip, column : ndarray of int
        Of the maxima.
    sigma : float
        Width of the Gaussian in px.
    slope : ndarray of float
        Of the ground under each line, per px; NaN leaves the line out.

    Returns
    -------
    place : ndarray of float
        In px along the profile.
    fine : ndarray of bool
        False where the maximum wandered off, the picture's edge cuts the kernel, or the line is much sharper or
        blunter than the others: a line cut by a field stop, or debris.

    Notes
    -----
    Zero of the correlation with the derivative of a Gaussian, by Newton's method on the exact kernel, so that no
    parabola through three samples biases it. The maximum of the matched filter is the least-squares place of a
    line of that profile; for any symmetric line it is unbiased.
    """
    reach = max(2, int(np.ceil(3.5 * sigma)))
    offsets = np.arange(-reach, reach + 1)
    at = column[:, None] + offsets[None, :]
    clipped = np.clip(at, 0, profiles.shape[1] - 1)
    values = profiles[strip[:, None], clipped]
    whole = mask[strip[:, None], clipped] & (at == clipped)
    # Cut kernels: allowed down to 2.5 sigma, where the lost weight is too small to move the zero.
    near = np.abs(offsets) <= np.ceil(2.5 * sigma)
    fine = (whole | ~near).all(axis=1)
    known = np.isfinite(slope)
    values = values - np.where(known, slope, 0.0)[:, None] * offsets[None, :]
    values = np.where(whole, values - values.min(axis=1, keepdims=True), 0.0)
    place = np.zeros(len(column))
    for _ in range(6):
        t = (offsets[None, :] - place[:, None]) / sigma
        bell = np.exp(-0.5 * t * t)
        pull = (values * t * bell).sum(axis=1)
        bend = (values * (1 - t * t) * bell).sum(axis=1)
        step = np.where(bend > 0, sigma * pull / np.where(bend > 0, bend, 1.0), 0.0)
        place += np.clip(step, -0.5 * sigma, 0.5 * sigma)
    fine &= known & (np.abs(place) < 1.0 + 0.5 * sigma)
    sharpness = bend / np.maximum((values * bell).sum(axis=1), 1e-12)
    usual = float(np.median(sharpness[fine])) if fine.any() else 0.0
    return column + place, fine & (np.abs(sharpness - usual) < 0.35 * abs(usual))


def _along(
    stack: NDArray[np.float32], strip: NDArray[np.int64], place: FloatArray, *, pitch: float
) -> tuple[tuple[float, float], float]:
    """Usual values on the lines and between them, and how unbroken the lines are.

    The latter is the lower of two numbers near 1 for lines. One is 1 less the relative spread of the contrast
    along them, noise taken out: 0 for a row of dots that fill half of it; a line stays as it is where another crosses
    it. The other tells lines from the gaps between rows of dots, which are unbroken too: the usual depth of the
    ground over its greatest, which for dots is small, as most of a row of dots is gap.
    """
    pick = np.linspace(0, len(place) - 1, min(len(place), 400)).astype(int)
    centre = np.rint(place[pick]).astype(int)

    def column(shift: int) -> FloatArray:
        at = np.clip(centre + shift, 0, stack.shape[2] - 1)
        return np.asarray(stack[strip[pick], :, at], dtype=np.float64)

    half = max(2, round(pitch / 2))
    line, ground = column(0), column(half)
    levels = float(np.median(line)), float(np.median(ground))
    sign = 1 if line.mean() > ground.mean() else -1
    contrast = (line - ground.mean(axis=1, keepdims=True)) * sign
    mean = contrast.mean(axis=1)
    neighbour = (contrast[:, 1:] * contrast[:, :-1]).mean(axis=1) - mean**2
    spread = np.sqrt(np.clip(neighbour, 0, None)) / np.maximum(mean, 1e-9)
    depth = (line.mean(axis=1, keepdims=True) - ground) * sign
    usual = np.median(depth, axis=1) / np.maximum(np.percentile(depth, 90, axis=1), 1e-9)
    return levels, min(1 - float(np.median(spread)), float(np.median(usual)))
