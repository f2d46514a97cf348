"""Spots drawn out by motion within the exposure: a sharp spot swept evenly along one axis of the picture."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.seeing.fit import Camera, Windows, inverses

Float = NDArray[np.float64]

_ROUNDS = 10
_DAMPING = 0.02
_LEAST_HALF = 0.3  # widths, of the way: shorter streaks have the shape of a Gaussian and no way to be fitted


@dataclass(frozen=True, slots=True)
class Streaks:
    """Fitted streaks, one row a window."""

    values: Float  # (N, 4) amplitude of the resting spot spread over the way, x, y, half of the way in px
    covariance: Float  # (N, 4, 4)
    chi2: Float  # (N,)
    along_x: NDArray[np.bool_]  # (N,)


def fit_streaks(
    windows: Windows, start: tuple[Float, Float, Float], *, half: Float, along_x: NDArray[np.bool_], camera: Camera,
    width: float,
) -> Streaks:  # fmt: skip
    """Fit evenly swept spots.

    Parameters
    ----------
    windows : Windows
        N cut-outs.
    start : tuple of three ndarray of shape (N,)
        First guess of peak, x and y; grey and px.
    half : ndarray of shape (N,)
        First guess of half the way in px.
    along_x : ndarray of bool, shape (N,)
        The way lies along x, else along y.
    camera : Camera
        Noise of a pixel.
    width : float
        Standard deviation of the resting spot in px.

    Returns
    -------
    streaks : Streaks
        Their centre is the mean place over the exposure, as for a spot at rest.
    """
    p = np.stack(
        [start[0], start[1] - windows.left, start[2] - windows.top, np.maximum(half, 0.5 * width)], 1
    )
    for _ in range(_ROUNDS):
        gradient, matrix, _ = _equations(windows, p, along_x, camera, width)
        step = np.einsum("nij,nj->ni", inverses(matrix * (1 + _DAMPING * np.eye(4))), gradient)
        p[:, 0] = np.maximum(p[:, 0] + np.clip(step[:, 0], -0.5 * p[:, 0], p[:, 0]), 0.01)
        p[:, 1:3] += np.clip(step[:, 1:3], -1, 1)
        p[:, 3] = np.maximum(p[:, 3] + np.clip(step[:, 3], -1, 1), _LEAST_HALF * width)
    _, matrix, chi2 = _equations(windows, p, along_x, camera, width)
    p[:, 1] += windows.left
    p[:, 2] += windows.top
    return Streaks(p, inverses(matrix), chi2, along_x)


def _equations(
    windows: Windows, p: Float, along_x: NDArray[np.bool_], camera: Camera, width: float
) -> tuple[Float, Float, Float]:
    """Gradient, Fisher matrix and chi2 for amplitude, x, y and half way."""
    from scipy.special import erf

    n, k, _ = windows.grey.shape
    at = np.arange(k)
    middle = np.where(along_x, p[:, 1], p[:, 2])[:, None]
    across = np.where(along_x, p[:, 2], p[:, 1])[:, None]
    a, half = p[:, 0, None], p[:, 3, None]
    t, s = at - middle, (at - across) / width
    ends = [np.exp(-0.5 * ((t + sign * half) / width) ** 2) for sign in (1, -1)]
    root = np.sqrt(2) * width
    long = np.sqrt(np.pi / 8) * width / half * (erf((t + half) / root) - erf((t - half) / root))
    slope = (ends[1] - ends[0]) / (2 * half)  # d long / d middle
    growth = (ends[0] + ends[1]) / (2 * half) - long / half
    wide = np.exp(-0.5 * s * s)
    parts = [(long, wide), (a * slope, wide), (a * long, wide * s / width), (a * growth, wide)]
    lying = along_x[:, None, None]
    columns = [
        np.where(lying, w[:, :, None] * v[:, None, :], v[:, :, None] * w[:, None, :]) * windows.shade
        for v, w in parts
    ]
    model = a[:, :, None] * columns[0]
    second = np.where(lying, columns[1], columns[2])
    third = np.where(lying, columns[2], columns[1])
    jacobian = np.stack([columns[0], second, third, columns[3]], -1).reshape(n, k * k, 4)
    variance = camera.gain * np.maximum(windows.background - camera.black + model, 0) + camera.read_variance
    weight = np.where(windows.bad, 0, 1 / variance)
    rest = windows.grey - model
    weighted = jacobian * weight.reshape(n, -1, 1)
    gradient = np.einsum("npi,np->ni", weighted, rest.reshape(n, -1))
    return gradient, np.matmul(jacobian.transpose(0, 2, 1), weighted), (weight * rest * rest).sum((1, 2))
