"""Weighted Gauss-Newton fits of spots to small windows, all sightings of a batch at once.

Model of a window: background + shade * A exp(-((x-x0)/sx)^2/2 - ((y-y0)/sy)^2/2), with the variance of a
pixel read^2 + gain * (model - black). A Gaussian in two directions is a product, so the sums of the normal
equations are moments sum W g^2 u^p v^q and come from two small matrix products per window.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

F32 = NDArray[np.float32]


@dataclass(frozen=True, slots=True)
class Camera:
    """Noise of one pixel: variance = read_variance + gain * (grey - black), and what is lost to saturation."""

    read_variance: float  # grey^2, at no light; includes quantisation
    gain: float  # grey^2 per grey
    black: float  # grey value of no light
    full_scale: float  # grey values from here on are left out of fits


@dataclass(frozen=True, slots=True)
class Windows:
    """Cut-outs around sightings; column and row 0 of window i lie at pixel (left[i], top[i])."""

    left: NDArray[np.int64]  # (N,)
    top: NDArray[np.int64]  # (N,)
    grey: F32  # (N, k, k) grey values less the background
    background: F32  # (N, k, k) grey values
    shade: F32  # (N, k, k) share of a spot's light that passes the reticle
    bad: NDArray[np.bool_]  # (N, k, k) pixels that are not to be used

    def take(self, rows: NDArray[np.int64] | NDArray[np.bool_]) -> Windows:
        """Give the chosen windows."""
        return Windows(
            self.left[rows], self.top[rows], self.grey[rows], self.background[rows], self.shade[rows],
            self.bad[rows],
        )  # fmt: skip


@dataclass(frozen=True, slots=True)
class Spots:
    """Fitted spots, one row a window."""

    amplitude: NDArray[np.float64]  # (N,) grey at the centre
    x: NDArray[np.float64]  # (N,) px
    y: NDArray[np.float64]  # (N,) px
    sx: NDArray[np.float64]  # (N,) px
    sy: NDArray[np.float64]  # (N,) px
    covariance: NDArray[np.float64]  # (N, 3, 3) of amplitude, x, y
    chi2: NDArray[np.float64]  # (N,) sum of weighted squares of the residual
    excess: NDArray[np.float64]  # (N,) light that the fit leaves in the window, over the light of the spot
    growth: NDArray[np.float64]  # (N, 2) what the residual adds to log sx and log sy, in standard deviations
    slant: NDArray[np.float64]  # (N,) what it says of a slanting long axis, in standard deviations
    good: NDArray[np.bool_]  # (N,) converged inside the window to a bright spot

    def __len__(self) -> int:
        return len(self.x)

    def take(self, rows: NDArray[np.int64]) -> Spots:
        """Give the chosen spots."""
        return Spots(*(getattr(self, f.name)[rows] for f in fields(self)))


# columns of the Jacobian as powers (of u, of v) of the unit coordinates: A, x, y, log sx, log sy, slant
_POWERS = ((0, 0), (1, 0), (0, 1), (2, 0), (0, 2), (1, 1))
_RIDGE = 1e-9  # added to a unit diagonal
_DAMPING = 1.0  # longest step of a centre in px
_MAX_STEP_WIDTH = 0.35  # longest step of log width


def fit_spots(
    windows: Windows, start: tuple[NDArray[np.float64], NDArray[np.float64]], *, camera: Camera,
    width: tuple[NDArray[np.float64], NDArray[np.float64]], free_width: bool = False, rounds: int = 3,
) -> Spots:  # fmt: skip
    """Fit one spot to each window.

    Parameters
    ----------
    windows : Windows
        N cut-outs.
    start : tuple of two arrays of shape (N,)
        First guess of x and y in px of the picture.
    camera : Camera
        Noise of a pixel.
    width : tuple of two arrays of shape (N,)
        Standard deviations of the spot along x and y in px; the start where `free_width`.
    free_width : bool
        Fit both widths too.
    rounds : int
        Gauss-Newton steps before the last one.

    Returns
    -------
    spots : Spots
        The covariance is the inverse Fisher information under the camera's noise.

    Notes
    -----
    Weights follow the model, not the data, so dim pixels that happen to be low are not preferred.
    """
    n, k, _ = windows.grey.shape
    columns = 5 if free_width else 3
    p = np.empty((n, 5))
    p[:, 1], p[:, 2] = start[0] - windows.left, start[1] - windows.top
    p[:, 3], p[:, 4] = np.log(width[0]), np.log(width[1])
    p[:, 0] = _first_amplitude(windows, p)
    for _ in range(rounds):
        gradient, matrix, _ = _normal_equations(windows, p, camera, columns)
        p[:, :columns] += _limited(_solve(matrix, gradient), p)
    gradient, matrix, chi2 = _normal_equations(windows, p, camera, 6)
    inner = inverses(matrix[:, :columns, :columns])
    last = np.einsum("nij,nj->ni", inner, gradient[:, :columns])
    p[:, :columns] += _limited(last, p)
    covariance = inner[:, :3, :3]
    full = inverses(matrix)
    more = np.einsum("nij,nj->ni", full, gradient)
    doubt = np.sqrt(np.maximum(np.einsum("nii->ni", full), 1e-30))
    inside = (p[:, 1:3] > -1).all(1) & (p[:, 1:3] < k).all(1)
    good = inside & (p[:, 0] > 0) & np.isfinite(p).all(1) & (np.einsum("nii->ni", covariance) > 0).all(1)
    sx, sy = np.exp(p[:, 3]), np.exp(p[:, 4])
    light = np.maximum(2 * np.pi * p[:, 0] * sx * sy, 1e-9)
    all_light = np.where(windows.bad, 0, windows.grey).sum((1, 2), dtype=np.float64)
    return Spots(
        p[:, 0], p[:, 1] + windows.left, p[:, 2] + windows.top, sx, sy, covariance, chi2, all_light / light - 1,
        (more / doubt)[:, 3:5], (more / doubt)[:, 5], good,
    )  # fmt: skip


def profiles(p: NDArray[np.float64], k: int) -> tuple[F32, F32, F32, F32]:
    """Unit coordinates u, v and profiles exp(-u^2/2), exp(-v^2/2) along x and y, each (N, k)."""
    at = np.arange(k, dtype=np.float32)
    sx, sy = np.exp(p[:, 3]), np.exp(p[:, 4])
    u = ((at - p[:, 1, None].astype(np.float32)) / sx[:, None].astype(np.float32)).astype(np.float32)
    v = ((at - p[:, 2, None].astype(np.float32)) / sy[:, None].astype(np.float32)).astype(np.float32)
    return u, v, np.exp(-0.5 * u * u), np.exp(-0.5 * v * v)


def _first_amplitude(windows: Windows, p: NDArray[np.float64]) -> NDArray[np.float64]:
    """Amplitude by unweighted least squares at the first guess."""
    _, _, gx, gy = profiles(p, windows.grey.shape[1])
    shape = gy[:, :, None] * gx[:, None, :] * windows.shade
    shape[windows.bad] = 0
    top = np.einsum("nij,nij->n", shape, windows.grey)
    power = np.maximum(np.einsum("nij,nij->n", shape, shape), 1e-6)
    return np.asarray(np.maximum(top / power, 1e-3), np.float64)


def _normal_equations(
    windows: Windows, p: NDArray[np.float64], camera: Camera, columns: int
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Gradient, Fisher matrix and chi2 at the parameters `p`."""
    u, v, gx, gy = profiles(p, windows.grey.shape[1])
    model = gy[:, :, None] * gx[:, None, :]
    model *= windows.shade
    model *= p[:, 0, None, None].astype(np.float32)
    weight = windows.background - np.float32(camera.black)
    weight += model
    weight *= np.float32(camera.gain)
    weight += np.float32(camera.read_variance)
    np.reciprocal(weight, out=weight)
    weight[windows.bad] = 0
    np.subtract(windows.grey, model, out=model)
    residual = weight * model
    model *= residual
    chi2 = model.sum(axis=(1, 2), dtype=np.float64)
    residual *= windows.shade
    weight *= windows.shade
    weight *= windows.shade
    order = 3 if columns >= 5 else 2
    first = _moments(residual, gx, gy, u, v, order)
    second = _moments(weight, gx * gx, gy * gy, u, v, 2 * order - 1)
    scale = _scales(p)[:, :columns]
    powers = _POWERS[:columns]
    gradient = np.stack([first[:, q, r] for r, q in powers], 1) * scale
    matrix = np.stack(
        [np.stack([second[:, b + d, a + c] for c, d in powers], 1) for a, b in powers], 1
    )  # fmt: skip
    return gradient, matrix * scale[:, :, None] * scale[:, None, :], chi2


def _scales(p: NDArray[np.float64]) -> NDArray[np.float64]:
    """Factors that turn a power of u, v into the derivative of the model."""
    a = p[:, 0]
    return np.stack([np.ones_like(a), a / np.exp(p[:, 3]), a / np.exp(p[:, 4]), a, a, a], 1)


def _moments(values: F32, fx: F32, fy: F32, u: F32, v: F32, order: int) -> NDArray[np.float64]:
    """Sums of values * fx u^q * fy v^p over each window, for p, q below `order`, indexed [n, p, q]."""
    x = np.empty((*fx.shape, order), np.float32)
    y = np.empty((len(fy), order, fy.shape[1]), np.float32)
    x[..., 0], y[:, 0] = fx, fy
    for i in range(1, order):
        np.multiply(x[..., i - 1], u, out=x[..., i])
        np.multiply(y[:, i - 1], v, out=y[:, i])
    return np.asarray(np.matmul(y, np.matmul(values, x)), np.float64)


def _solve(matrix: NDArray[np.float64], gradient: NDArray[np.float64]) -> NDArray[np.float64]:
    """Steps of all fits; a singular one gives a step of 0."""
    return np.asarray(np.einsum("nij,nj->ni", inverses(matrix), gradient))


def inverses(matrix: NDArray[np.float64]) -> NDArray[np.float64]:
    """Invert positive matrices, each scaled to unit diagonal first; zeros where there is no inverse."""
    power = np.einsum("nii->ni", matrix)
    root = np.sqrt(np.maximum(power, 1e-30))
    scale = 1 / (root[:, :, None] * root[:, None, :])
    scaled = matrix * scale
    usable = np.isfinite(scaled).all((1, 2)) & (power > 1e-20).all(1)
    scaled[~usable] = np.eye(matrix.shape[1])
    scaled += _RIDGE * np.eye(matrix.shape[1])
    inverse = _inverse_of_three(scaled) if matrix.shape[1] == 3 else np.linalg.inv(scaled)
    inverse *= scale
    inverse[~usable] = 0
    return np.asarray(inverse)


def _inverse_of_three(m: NDArray[np.float64]) -> NDArray[np.float64]:
    """Inverse of symmetric 3 x 3 matrices by cofactors."""
    a, b, c, d, e, f = m[:, 0, 0], m[:, 0, 1], m[:, 0, 2], m[:, 1, 1], m[:, 1, 2], m[:, 2, 2]
    p, q, r = d * f - e * e, c * e - b * f, b * e - c * d
    rows = [p, q, r, q, a * f - c * c, b * c - a * e, r, b * c - a * e, a * d - b * b]
    determinant = np.maximum(a * p + b * q + c * r, 1e-12)  # 1 for orthogonal columns of unit length
    return np.asarray((np.stack(rows, 1) / determinant[:, None]).reshape(-1, 3, 3))


def _limited(step: NDArray[np.float64], p: NDArray[np.float64]) -> NDArray[np.float64]:
    """Steps cut to what the linearised model can stand: at most a pixel, half the amplitude, a third in width."""
    step = step.copy()
    step[:, 0] = np.clip(step[:, 0], -0.7 * np.abs(p[:, 0]), 3 * np.abs(p[:, 0]) + 1)
    step[:, 1:3] = np.clip(step[:, 1:3], -_DAMPING, _DAMPING)
    step[:, 3:] = np.clip(step[:, 3:], -_MAX_STEP_WIDTH, _MAX_STEP_WIDTH)
    return step
