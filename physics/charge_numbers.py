"""Charge numbers of one bench's droplets, found together with the factor that all their charges share.

An error of scale, gap, voltage, viscosity or density moves all charges by nearly one factor. Added to each
droplet's own uncertainty it would hide most numbers; left out it makes wrong ones look certain. Taken as one
unknown with its prior it is measured by the droplets themselves.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics.droplet import ELEMENTARY_CHARGE
from physics.errors import PhysicsError

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
LogDensity = Callable[[FloatArray], FloatArray]  # charges in C -> log density of one droplet's charge
LogLikelihood = tuple[ArrayLike, ArrayLike]  # consecutive charge numbers and the log likelihood of each
Shape = LogDensity | LogLikelihood | None

OUTLIER_SHARE = 0.05  # prior probability that a charge is on no tooth
FUNCTION_FROM = 0.1  # own standard deviation over e from which a given density replaces the normal one
PAIR_FROM = 0.25  # the same for a likelihood that is known at whole numbers only
BLURRED_FROM = 2.0  # own standard deviation over e above which a charge shows no tooth (1e-34)
_GRID_REACH = 4.0  # prior standard deviations of the factor that are searched
_LEAST_GRID = 321
_MOST_GRID = 6001
_LARGEST_ARRAY = 1_000_000  # elements of one work array


@dataclass(frozen=True, slots=True)
class ChargeNumbers:
    """Charge numbers of a bench's droplets, found together with the factor that all their charges share."""

    number: IntArray  # (N,) signed, the most probable
    probability: FloatArray  # (N,) of that number, for a droplet that carries a whole number
    outlier_probability: FloatArray  # (N,) that the charge is on no tooth: a bad track
    number_values: IntArray  # (N, K) the numbers that were weighed
    number_probability: FloatArray  # (N, K) rows add up to 1, or less where a blurred charge reaches beyond K
    factor: float  # measured over true charge, posterior mean, for a droplet of typical sensitivity
    factor_std: float
    joint: bool  # the charges narrowed the factor; False: each droplet stands alone under the prior


def number_probabilities(
    charges: ArrayLike,
    own_stds: ArrayLike,
    *,
    shared_rel_std: ArrayLike = 0.0,
    log_likelihoods: Sequence[Shape] | None = None,
    unit: float = ELEMENTARY_CHARGE,
) -> ChargeNumbers:
    """Probability of every charge number of every droplet of one bench.

    Parameters
    ----------
    charges : array_like of shape (N,)
        Posterior means in C, signed, with radius and localisation noise integrated.
    own_stds : array_like of shape (N,)
        Their own standard deviations in C, above 0, without what the droplets share.
    shared_rel_std : array_like of shape () or (N,), optional
        Relative standard uncertainty of the common factor; per droplet where sensitivities differ.
    log_likelihoods : sequence, optional
        For each droplet None, a function that gives the log density at charges in C (up to a constant), or a
        pair (consecutive charge numbers, their log likelihood under a flat prior), which is interpolated.
        Used where the charge is so blurred that more than mean and standard deviation matter: from 0.1 e for
        a function, from 0.25 e for a pair, which is too coarse below. Elsewhere the density is normal.
    unit : float, optional
        In C; the elementary charge unless a scale of another unit is wanted.

    Returns
    -------
    numbers : ChargeNumbers
        Prior flat over all whole numbers, 0 and both signs included.

    Raises
    ------
    PhysicsError
        If lengths differ or a standard deviation is not above 0.

    Notes
    -----
    Measured charge = factor x n e + noise, the factor normal about 1. Each droplet's likelihood of a factor
    is its wrapped density: a smooth set of charges says nothing of the factor, so a set whose comb is blurred
    falls back to the form in which each droplet carries the shared uncertainty by itself. Over the factors k,
    P_i(n) = sum_k p(k given all) P_i(n given k).
    """
    q, s, shared = _columns(charges, own_stds, shared_rel_std, unit)
    if len(q) == 0:
        return _none()
    grid, prior = _factor_grid(q, s, shared)
    values, groups = _windows(q, s, shared, len(grid))
    shapes = [None] * len(q) if log_likelihoods is None else list(log_likelihoods)

    def wrapped(rows: IntArray, columns: slice, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        factor = 1 + points * shared[rows, None]
        return _wrapped(q[rows], s[rows], values[rows, columns], factor, [shapes[i] for i in rows], unit)

    log_post = np.log(prior)
    for rows, columns in groups:
        density, _ = wrapped(rows, columns, grid)
        log_post = log_post + np.log((1 - OUTLIER_SHARE) * density + OUTLIER_SHARE).sum(axis=0)
    post = np.exp(log_post - log_post.max())
    likely = post > 1e-9
    grid, post = grid[likely], post[likely] / post[likely].sum()
    mean = float(post @ grid)
    std = float(np.sqrt(post @ (grid - mean) ** 2))
    blurred = s > BLURRED_FROM
    values[blurred] += (np.rint(q / (1 + mean * shared)) - np.rint(q)).astype(np.int64)[blurred, None]
    probability = _blurred(q, s, values, 1 + mean * shared, std * shared)
    outlier = np.full(len(q), OUTLIER_SHARE)
    for rows, columns in groups:
        density, given = wrapped(rows, columns, grid)
        outlier[rows] = (OUTLIER_SHARE / ((1 - OUTLIER_SHARE) * density + OUTLIER_SHARE)) @ post
        probability[rows] = 0.0
        probability[rows, columns] = given @ post
    best = probability.argmax(axis=1)
    rows = np.arange(len(q))
    typical = float(np.median(shared))
    return ChargeNumbers(
        number=values[rows, best], probability=probability[rows, best],
        outlier_probability=outlier, number_values=values, number_probability=probability,
        factor=1 + typical * mean, factor_std=typical * std, joint=bool(typical > 0 and std < 0.5),
    )  # fmt: skip


def _columns(
    charges: ArrayLike, own: ArrayLike, shared: ArrayLike, unit: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Check the columns and give charges and deviations over the unit."""
    q, s = np.asarray(charges, dtype=float) / unit, np.asarray(own, dtype=float) / unit
    if q.ndim != 1 or q.shape != s.shape:
        raise PhysicsError("own_stds", s.shape, f"flat and as many as there are charges, {q.shape}")
    if not (np.all(np.isfinite(q)) and np.all(np.isfinite(s)) and np.all(s > 0)):
        raise PhysicsError("own_stds", s * unit, "finite and above 0 C, charges finite")
    rel = np.broadcast_to(np.asarray(shared, dtype=float), q.shape)
    if not (np.all(rel >= 0) and np.all(rel < 0.25)):
        raise PhysicsError("shared_rel_std", shared, "at least 0 and below 0.25")
    return q, s, rel


def _none() -> ChargeNumbers:
    """Result for no droplets."""
    empty, none = np.empty(0), np.empty(0, np.int64)
    return ChargeNumbers(none, empty, empty, np.empty((0, 0), np.int64), np.empty((0, 0)), 1.0, 0.0, False)


def _factor_grid(q: FloatArray, s: FloatArray, shared: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Grid of the factor in prior standard deviations and its prior; fine enough for the sharpest charge."""
    if not shared.any():
        return np.zeros(1), np.ones(1)
    sharpest = np.max(np.abs(q) * shared / s)
    count = int(np.clip(np.ceil(8 * _GRID_REACH * sharpest), _LEAST_GRID, _MOST_GRID)) | 1
    grid = np.linspace(-_GRID_REACH, _GRID_REACH, count)
    prior = np.exp(-0.5 * grid**2)
    return grid, prior / prior.sum()


_Group = tuple[IntArray, slice]  # droplets (rows), and the columns of the window that they need


def _windows(q: FloatArray, s: FloatArray, shared: FloatArray, grid: int) -> tuple[IntArray, list[_Group]]:
    """Whole numbers (N, K) about each charge; groups of droplets with windows of one width and small work arrays.

    Droplets too blurred to tell one number are in no group.
    """
    reach = np.ceil(5 * s + _GRID_REACH * shared * np.abs(q)).astype(np.int64) + 1
    sharp = np.flatnonzero(s <= BLURRED_FROM)
    widest = int(reach[sharp].max(initial=12))
    values = np.rint(q).astype(np.int64)[:, None] + np.arange(-widest, widest + 1)
    groups: list[_Group] = []
    order = sharp[np.argsort(-reach[sharp], kind="stable")]
    while len(order):
        side = int(reach[order[0]])
        most = max(1, _LARGEST_ARRAY // (grid * (2 * side + 1)))
        alike = int(np.sum(reach[order] >= 0.6 * side))
        rows, order = order[: min(most, alike)], order[min(most, alike) :]
        groups.append((rows, slice(widest - side, widest + side + 1)))
    return values, groups


def _blurred(
    q: FloatArray, s: FloatArray, values: IntArray, factor: FloatArray, factor_std: FloatArray
) -> FloatArray:
    """Probabilities (N, K) of numbers so blurred that their sum over all whole numbers is an integral."""
    width = np.hypot(s, factor_std * q)[:, None] / factor[:, None]
    z = (q[:, None] / factor[:, None] - values) / width
    return np.asarray(np.exp(-0.5 * z**2) / (np.sqrt(2 * np.pi) * width))


def _wrapped(
    q: FloatArray, s: FloatArray, values: IntArray, factor: FloatArray, exact: Sequence[Shape], unit: float
) -> tuple[FloatArray, FloatArray]:
    """Wrapped density (N, G) of each charge for each factor, and the probability (N, K, G) of each number given it."""
    log_like = _log_likelihood(q, s, values, factor, exact, unit)
    top = log_like.max(axis=1)
    given = np.exp(log_like - top[:, None])
    total = given.sum(axis=1)
    return factor * np.exp(top) * total, given / total[:, None]


def _log_likelihood(
    q: FloatArray,
    s: FloatArray,
    values: IntArray,
    factor: FloatArray,
    exact: Sequence[Shape],
    unit: float,
) -> FloatArray:
    """Log density (N, K, G) of each measured charge for each number and factor, per unit of charge."""
    expected = values[:, :, None] * factor[:, None, :]
    z = (q[:, None, None] - expected) / s[:, None, None]
    out: FloatArray = -0.5 * z**2 - np.log(s * np.sqrt(2 * np.pi))[:, None, None]
    for i, given in enumerate(exact):
        if callable(given):
            if s[i] >= FUNCTION_FROM:
                out[i] = _tabulated(given, expected[i], q[i], s[i], unit)
        elif given is not None and s[i] >= PAIR_FROM:
            out[i] = _interpolated(given, expected[i])
    return out


def _tabulated(density: LogDensity, charge: FloatArray, q: float, s: float, unit: float) -> FloatArray:
    """Log density at charges over the unit from a table of the given function; 385 points err by less than 0.01."""
    grid = np.linspace(min(q - 8 * s, charge.min()), max(q + 8 * s, charge.max()), 385)
    values = np.asarray(density(grid * unit), dtype=float)
    if values.shape != grid.shape or not np.isfinite(values.max()):
        raise PhysicsError(
            "log_likelihoods", values.shape, "a function that gives one finite log density for each charge"
        )
    values = np.maximum(values - values.max(), -700.0)
    area = np.sum(np.exp(values)) * (grid[1] - grid[0])
    return np.asarray(np.interp(charge, grid, values) - np.log(area))


def _interpolated(given: LogLikelihood, charge: FloatArray) -> FloatArray:
    """Log density between and beyond whole numbers by Akima's local cubic, which is exact for a normal one."""
    from scipy.interpolate import Akima1DInterpolator

    numbers, log_like = np.asarray(given[0], dtype=float), np.asarray(given[1], dtype=float)
    usable = np.isfinite(log_like) & (log_like > log_like.max() - 200)
    numbers, log_like = numbers[usable], log_like[usable]
    if len(numbers) < 3 or np.any(np.diff(numbers) != 1):
        raise PhysicsError("log_likelihoods", numbers, "finite at three consecutive numbers or more")
    curve = Akima1DInterpolator(numbers, log_like)
    fine = np.linspace(numbers[0], numbers[-1], 16 * (len(numbers) - 1) + 1)
    density = np.exp(curve(fine) - log_like.max())
    area = np.sum((density[1:] + density[:-1]) / 2) * (fine[1] - fine[0])
    inside = np.clip(charge, numbers[0], numbers[-1])
    beyond = 8.0 * np.abs(charge - inside)  # steep beyond the numbers that were weighed
    return np.asarray(curve(inside) - beyond - log_like.max() - np.log(area))


def certain_share(own_std: float, *, level: float = 0.95) -> float:
    """Share of droplets whose most probable number has at least a certain probability.

    Parameters
    ----------
    own_std : float
        Standard uncertainty of the charge over the unit, above 0; infinite gives 0.
    level : float, optional
        Probability from which a number is called certain.

    Returns
    -------
    share : float
        Over normal errors and a flat prior of the numbers.
    """
    if not own_std > 0:
        raise PhysicsError("own_std", own_std, "above 0")
    if own_std > 2:
        return 0.0
    from scipy.special import ndtri

    error = own_std * ndtri((np.arange(2000) + 0.5) / 2000)
    away = (error - np.rint(error))[:, None] - np.arange(-12, 13)
    likelihood = np.exp(-0.5 * (away / own_std) ** 2)
    return float(np.mean(likelihood.max(axis=1) / likelihood.sum(axis=1) >= level))
