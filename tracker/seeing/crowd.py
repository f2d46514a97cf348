"""Spots too near each other for single fits: two at a time, solved jointly."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.seeing.fit import Camera, Windows, inverses

Float = NDArray[np.float64]

NEIGHBOUR = 5.6  # widths: nearer spots are fitted jointly
_CHUNK = 256  # pairs at a time: the Jacobian is kept whole
_DAMPING = 0.02  # share added to the diagonal, after Levenberg: near pairs are almost singular


@dataclass(frozen=True, slots=True)
class Pairs:
    """Two spots fitted to each window, parameters (A, x, y) of the first, then of the second."""

    values: Float  # (N, 6)
    covariance: Float  # (N, 6, 6)
    chi2: Float  # (N,)
    excess: Float  # (N,) light that the fit leaves in the window, over the light of both

    def __len__(self) -> int:
        return len(self.values)

    @property
    def separation(self) -> Float:
        """Distance of the two in px."""
        return np.asarray(
            np.hypot(self.values[:, 1] - self.values[:, 4], self.values[:, 2] - self.values[:, 5])
        )

    def take(self, rows: NDArray[np.int64] | NDArray[np.bool_]) -> Pairs:
        """Give the chosen pairs."""
        return Pairs(self.values[rows], self.covariance[rows], self.chi2[rows], self.excess[rows])


def fit_pairs(windows: Windows, start: Float, *, camera: Camera, width: float, rounds: int = 8) -> Pairs:
    """Fit two spots of one width to each window.

    Parameters
    ----------
    windows : Windows
        N cut-outs that hold both.
    start : ndarray of shape (N, 6)
        First guess of A, x, y of either; A in grey, x and y in px of the picture.
    camera : Camera
        Noise of a pixel.
    width : float
        Standard deviation of a spot in px.
    rounds : int
        Gauss-Newton steps.

    Returns
    -------
    pairs : Pairs
        The covariance is the inverse of the joint 6 x 6 Fisher matrix, so that it holds the doubt about how
        the light is shared.
    """
    parts = [slice(i, i + _CHUNK) for i in range(0, len(start), _CHUNK)]
    done = [_fit(windows.take(np.arange(len(start))[s]), start[s], (camera, width, rounds)) for s in parts]
    if not done:
        return Pairs(np.empty((0, 6)), np.empty((0, 6, 6)), np.empty(0), np.empty(0))
    return Pairs(*(np.concatenate([getattr(d, f.name) for d in done]) for f in fields(Pairs)))


def _fit(windows: Windows, start: Float, how: tuple[Camera, float, int]) -> Pairs:
    """Fit one chunk."""
    camera, width, rounds = how
    p = start.copy()
    p[:, [1, 4]] -= windows.left[:, None]
    p[:, [2, 5]] -= windows.top[:, None]
    for _ in range(rounds):
        gradient, matrix, _ = _equations(windows, p, camera, width)
        matrix = matrix * (1 + _DAMPING * np.eye(6))
        step = np.einsum("nij,nj->ni", inverses(matrix), gradient)
        step[:, [1, 2, 4, 5]] = np.clip(step[:, [1, 2, 4, 5]], -1, 1)
        amplitude = np.maximum(np.abs(p[:, [0, 3]]), 1)
        step[:, [0, 3]] = np.clip(step[:, [0, 3]], -0.7 * amplitude, 2 * amplitude)
        p += step
        p[:, [0, 3]] = np.maximum(p[:, [0, 3]], 0.01)
    _, matrix, chi2 = _equations(windows, p, camera, width)
    p[:, [1, 4]] += windows.left[:, None]
    p[:, [2, 5]] += windows.top[:, None]
    light = np.maximum(2 * np.pi * width**2 * (p[:, 0] + p[:, 3]), 1e-9)
    all_light = np.where(windows.bad, 0, windows.grey).sum((1, 2), dtype=np.float64)
    return Pairs(p, inverses(matrix), chi2, all_light / light - 1)


def _equations(windows: Windows, p: Float, camera: Camera, width: float) -> tuple[Float, Float, Float]:
    """Gradient, Fisher matrix and chi2 of two spots."""
    n, k, _ = windows.grey.shape
    at = np.arange(k)
    columns = []
    model = np.zeros((n, k, k), np.float32)
    for first in (0, 3):
        u = ((at - p[:, first + 1, None]) / width).astype(np.float32)
        v = ((at - p[:, first + 2, None]) / width).astype(np.float32)
        shape = np.exp(-0.5 * v * v)[:, :, None] * np.exp(-0.5 * u * u)[:, None, :] * windows.shade
        scaled = shape * p[:, first, None, None].astype(np.float32)
        model += scaled
        scaled /= np.float32(width)
        columns += [shape, scaled * u[:, None, :], scaled * v[:, :, None]]
    variance = camera.gain * np.maximum(windows.background - camera.black + model, 0) + camera.read_variance
    weight = np.where(windows.bad, 0, 1 / variance).astype(np.float32)
    rest = windows.grey - model
    jacobian = np.stack(columns, -1).reshape(n, k * k, 6)
    weighted = jacobian * weight.reshape(n, k * k, 1)
    gradient = np.einsum("npi,np->ni", weighted, rest.reshape(n, -1))
    matrix = np.matmul(jacobian.transpose(0, 2, 1), weighted)
    chi2 = (weight * rest * rest).sum((1, 2), dtype=np.float64)
    return gradient.astype(np.float64), matrix.astype(np.float64), chi2


def near_pairs(frame: NDArray[np.int64], x: Float, y: Float, *, reach: float) -> NDArray[np.int64]:
    """Pairs (i, nearest neighbour of i) in the same frame within `reach` px, each pair once, i < j."""
    from scipy.spatial import cKDTree

    if len(x) < 2:
        return np.empty((0, 2), np.int64)
    at = np.column_stack([x, y, frame * (10 * reach)])
    distance, neighbour = cKDTree(at).query(at, k=2, distance_upper_bound=reach)
    rows = np.flatnonzero(np.isfinite(distance[:, 1]))
    pairs = np.sort(np.column_stack([rows, neighbour[rows, 1]]), axis=1)
    return np.unique(pairs, axis=0).astype(np.int64)


def without_others(
    windows: Windows, table: dict[str, NDArray[Any]], pairs: NDArray[np.int64], width: float
) -> Windows:
    """Windows of pairs with the light of third spots nearby taken off.

    Parameters
    ----------
    windows : Windows
        N cut-outs.
    table : dict of ndarray
        Columns `frame`, `x`, `y` in px of the picture, and `amplitude` of all spots.
    pairs : ndarray of shape (N, 2)
        Rows of the table that each window is about.
    width : float
        Standard deviation of a spot in px.

    Returns
    -------
    windows : Windows
        The same where there are no others.
    """
    from scipy.spatial import cKDTree

    reach = (NEIGHBOUR + 4) * width
    plane = table["frame"] * (10 * reach)
    tree = cKDTree(np.column_stack([table["x"], table["y"], plane]))
    middle = np.column_stack([0.5 * (table[c][pairs[:, 0]] + table[c][pairs[:, 1]]) for c in "xy"])
    near = tree.query_ball_point(np.column_stack([middle, plane[pairs[:, 0]]]), reach)
    owner = np.repeat(np.arange(len(pairs)), [len(n) for n in near])
    other = np.concatenate([np.asarray(n, np.int64) for n in near])
    third = (other != pairs[owner, 0]) & (other != pairs[owner, 1])
    owner, other = owner[third], other[third]
    if len(owner) == 0:
        return windows
    grey = windows.grey.copy()
    at = np.arange(grey.shape[1])
    gx = np.exp(-0.5 * ((at + windows.left[owner, None] - table["x"][other, None]) / width) ** 2)
    gy = np.exp(-0.5 * ((at + windows.top[owner, None] - table["y"][other, None]) / width) ** 2)
    light = table["amplitude"][other, None, None] * gy[:, :, None] * gx[:, None, :] * windows.shade[owner]
    np.subtract.at(grey, owner, light.astype(np.float32))
    return Windows(windows.left, windows.top, grey, windows.background, windows.shade, windows.bad)


def split_starts(spots: Float, width: float, sx: Float, sy: Float, slant: NDArray[np.bool_]) -> list[Float]:
    """First guesses of two spots in one blob, for unequal shares of light and either slant.

    Parameters
    ----------
    spots : ndarray of shape (N, 3)
        Amplitude, x, y of the blob.
    width : float
        Standard deviation of one spot in px.
    sx, sy : ndarray of shape (N,)
        Standard deviations of the blob in px.
    slant : ndarray of bool, shape (N,)
        Long axis along falling x = y rather than along x = -y, where both axes are long.

    Returns
    -------
    starts : list of ndarray of shape (N, 6)
    """
    # two equal spots d apart have the variance width^2 + d^2 / 4 along their line
    dx = np.sqrt(np.maximum(sx**2 - width**2, 0.02 * width**2))
    dy = np.sqrt(np.maximum(sy**2 - width**2, 0.02 * width**2)) * np.where(slant, 1, -1)
    a, x, y = spots.T
    starts = []
    for share in (0.5, 0.28, 0.72):
        far, near = 2 * (1 - share), 2 * share
        one, other = (a * share, x + far * dx, y + far * dy), (a * (1 - share), x - near * dx, y - near * dy)
        starts.append(np.stack([*one, *other], 1))
    return starts
