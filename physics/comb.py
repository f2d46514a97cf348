"""The comb statistic: how much better equally spaced charges explain a set than a smooth distribution does.

A comb of spacing a has its teeth at n a. Seen at the trial frequency f = 1/a, a charge q of standard
deviation s has the phase q f, and its likelihood ratio against a smooth distribution of charges is the
wrapped normal density of that phase with the standard deviation s f. Its height carries the price of a fine
comb by itself: halving a lowers it by ln 2 for every sharp charge, so no further penalty for a fine comb
belongs here.

References
----------
.. [1] K. V. Mardia, P. E. Jupp, Directional Statistics (Wiley, 2000), section 3.5.7: the wrapped normal density.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics.errors import PhysicsError

FloatArray = NDArray[np.float64]

OUTLIER_SHARES = (0.02, 0.15)  # shares of charges that are on no tooth; the statistic is averaged over them
STD_FACTORS = (1.0, 1.5)  # factors on the stated standard deviations; averaged over, too
COARSE_PHASE_STD = (
    0.12  # floor of the phase's standard deviation in the scan, so that it misses no sharp peak
)
COARSE_PHASE_STEP = 0.08  # step of the scan: phase that the largest charge gains in it
_SERIES_FROM = 0.2  # phase std above which the Fourier series is shorter than the sum over teeth of one width
_TEETH_TO = 0.3  # the same where each tooth has its own width, and only the sum is exact
HALF_TOLD = 0.24  # phase std; 13 kinds of simulated sets are then off by less than half their std
_GROUP = 32  # factors multiplied before a logarithm is taken; densities stay far below 1e9, so no overflow
_CHUNK = 24_000  # elements of one work array


def _empty() -> FloatArray:
    return np.empty((0, 2))


@dataclass(frozen=True, slots=True)
class ChargeSample:
    """Charges that share one unknown factor: those of one bench.

    `charge` (N,) signed, in C; `floor_std` (N,) the part of the own standard deviation that does not grow
    with the charge, in C; `rel_std` (N,) the part that grows with it, as the radius does, relative. `pair`
    (M, 2) holds two charges of one droplet before and after a step, `pair_cov` (M, 2, 2) their covariance in
    C^2. `shared_rel_std` is the relative standard uncertainty of the common factor.
    """

    charge: FloatArray
    floor_std: FloatArray
    rel_std: FloatArray
    pair: FloatArray = field(default_factory=_empty)
    pair_cov: FloatArray = field(default_factory=lambda: np.empty((0, 2, 2)))
    shared_rel_std: float = 0.0

    @property
    def largest(self) -> float:
        """Largest charge without its sign, in C; 0 for an empty sample."""
        return float(max(np.abs(self.charge).max(initial=0.0), np.abs(self.pair).max(initial=0.0)))

    @property
    def independent(self) -> tuple[FloatArray, FloatArray]:
        """Charges and standard deviations in C; a pair counts as its first charge and its difference."""
        own = np.hypot(self.floor_std, self.rel_std * self.charge)
        c = self.pair_cov
        step_var = c[:, 0, 0] + c[:, 1, 1] - 2 * c[:, 0, 1]
        charge = np.concatenate([self.charge, self.pair[:, 0], self.pair[:, 1] - self.pair[:, 0]])
        return charge, np.concatenate([own, np.sqrt(c[:, 0, 0]), np.sqrt(step_var)])

    def __len__(self) -> int:
        return len(self.charge) + 2 * len(self.pair)


def wrapped_normal(phase: ArrayLike, std: ArrayLike) -> FloatArray:
    """Density of a normal variable wrapped onto a circle of circumference 1.

    Parameters
    ----------
    phase : array_like
        Distance from the mean in turns, any value.
    std : array_like
        Standard deviation before wrapping, in turns, above 0; broadcast against `phase`.

    Returns
    -------
    density : ndarray
        Per turn; its mean over one turn is 1.

    Notes
    -----
    Sum over the two nearest teeth below a standard deviation of 0.2, where the third is below 4e-6 of the highest;
    three terms of the Fourier series above, where the fourth is below 7e-6.

    References
    ----------
    .. [1] K. V. Mardia, P. E. Jupp, Directional Statistics (Wiley, 2000), section 3.5.7.
    """
    phase = np.asarray(phase, dtype=float)
    away = np.abs(phase - np.rint(phase))
    return _density(away, np.broadcast_to(np.asarray(std, dtype=float), away.shape))


def _density(away: FloatArray, std: FloatArray) -> FloatArray:
    """Wrapped normal density at `away` (0..0.5) from the nearest tooth, all teeth of one width."""
    narrow = np.minimum(std, _SERIES_FROM)
    out = _normal(away, narrow) + _normal(1.0 - away, narrow)
    wide = std > _SERIES_FROM
    if wide.any():
        out[wide] = _series(away[wide], std[wide])
    return out


def _series(away: FloatArray, std: FloatArray) -> FloatArray:
    """Fourier series of the wrapped normal density."""
    h = np.exp(-2 * np.pi**2 * std * std)
    h4 = h * h * h * h
    c = np.cos(2 * np.pi * away)  # cos 2x = 2 c^2 - 1, cos 3x = c (4 c^2 - 3)
    c2 = c * c
    return np.asarray(1.0 + 2 * (h * c + h4 * (2 * c2 - 1) + h4 * h4 * h * c * (4 * c2 - 3)))


def _density_of_teeth(phase: FloatArray, width: Callable[[FloatArray], FloatArray]) -> FloatArray:
    """Density of phases where each tooth has its own width; one width where the teeth have merged anyway."""
    tooth = np.rint(phase)
    middle = width(tooth)
    out = np.zeros_like(phase)
    for shift in (-1.0, 0.0, 1.0):
        std = middle if shift == 0 else width(tooth + shift)
        out += _normal(phase - tooth - shift, np.minimum(std, 2 * _TEETH_TO))
    wide = middle > _TEETH_TO
    if wide.any():
        out[wide] = _series(np.abs(phase - tooth)[wide], middle[wide])
    return out


def _normal(x: FloatArray, std: FloatArray) -> FloatArray:
    """Normal density."""
    z = x / std
    return np.asarray(np.exp(-0.5 * z * z) * (1 / (np.sqrt(2 * np.pi) * std)))


def _single_density(sample: ChargeSample, frequency: FloatArray, factor: float, floor: float) -> FloatArray:
    """Density (N, F) of each single charge's phase; the standard deviation belongs to the tooth, not to the charge."""
    phase = np.abs(sample.charge)[:, None] * frequency
    std = sample.floor_std[:, None] * frequency
    if not sample.rel_std.any():
        return _density(np.abs(phase - np.rint(phase)), np.maximum(factor * std, floor))
    fixed, growing = (factor * std) ** 2, factor * sample.rel_std[:, None]

    def width(tooth: FloatArray) -> FloatArray:
        part = growing * tooth
        return np.asarray(np.maximum(np.sqrt(fixed + part * part), floor))

    return _density_of_teeth(phase, width)


def _pair_density(sample: ChargeSample, frequency: FloatArray, factor: float, floor: float) -> FloatArray:
    """Density (M, F) of pairs: sum over the teeth of the step, times the first charge's density given each."""
    c = sample.pair_cov
    first, step = sample.pair[:, 0], sample.pair[:, 1] - sample.pair[:, 0]
    step_var = c[:, 0, 0] + c[:, 1, 1] - 2 * c[:, 0, 1]
    slope = (c[:, 0, 1] - c[:, 0, 0]) / step_var
    rest = np.sqrt(np.maximum(c[:, 0, 0] - slope**2 * step_var, 0.0))
    phase = step[:, None] * frequency
    step_std = np.maximum(factor * np.sqrt(step_var)[:, None] * frequency, floor)
    rest_std = np.maximum(factor * rest[:, None] * frequency, floor)
    total = np.zeros_like(phase)
    nearest = np.rint(phase)
    for shift in (-2.0, -1.0, 0.0, 1.0, 2.0):
        away = phase - (nearest + shift)
        given = wrapped_normal(first[:, None] * frequency - slope[:, None] * away, rest_std)
        total += _normal(away, step_std) * given
    blurred = step_std > 0.6  # five teeth no longer hold the sum, and the step tells nothing any more
    alone = wrapped_normal(
        first[:, None] * frequency,
        np.maximum(factor * np.sqrt(c[:, 0, 0])[:, None] * frequency, floor),
    )
    return np.where(blurred, alone, total)


def _sum_of_logs(density: FloatArray, outliers: float) -> FloatArray:
    """Sum over the charges of ln((1 - w) density + w); products of a few first, as a logarithm is dear."""
    mixed = (1 - outliers) * density + outliers
    starts = np.arange(0, len(mixed), _GROUP)
    return np.asarray(np.log(np.multiply.reduceat(mixed, starts, axis=0)).sum(axis=0))


def log_ratios(sample: ChargeSample, frequency: ArrayLike, *, coarse: bool = False) -> FloatArray:
    """Log likelihood ratio of the comb against a smooth distribution, for each choice of the nuisances.

    Parameters
    ----------
    sample : ChargeSample
        Charges of one bench.
    frequency : array_like of shape (F,)
        Trial frequencies 1/a in 1/C, above 0.
    coarse : bool, optional
        Floor the standard deviations of the phases at 0.12 and leave out the larger factor on them: for the
        scan.

    Returns
    -------
    log_ratio : ndarray of shape (C, F)
        In nats; one row for each pair of outlier share and factor on the standard deviations.
    """
    frequency = np.asarray(frequency, dtype=float)
    factors = STD_FACTORS[:1] if coarse else STD_FACTORS
    floor = COARSE_PHASE_STD if coarse else 1e-9
    out = np.zeros((len(factors) * len(OUTLIER_SHARES), len(frequency)))
    width = max(1, _CHUNK // max(1, len(sample)))
    for start in range(0, len(frequency), width):
        part = slice(start, start + width)
        for i, factor in enumerate(factors):
            for density in (_single_density, _pair_density):
                if len(sample.charge if density is _single_density else sample.pair) == 0:
                    continue
                value = density(sample, frequency[part], factor, floor)
                for j, share in enumerate(OUTLIER_SHARES):
                    out[i * len(OUTLIER_SHARES) + j, part] += _sum_of_logs(value, share)
    return out


def log_mean_exp(values: FloatArray) -> FloatArray:
    """Logarithm of the mean of the exponentials along the first axis.

    Parameters
    ----------
    values : ndarray of shape (C, ...)
        In nats.

    Returns
    -------
    mean : ndarray of shape (...)
        In nats.
    """
    top = values.max(axis=0)
    return np.asarray(top + np.log(np.exp(values - top).mean(axis=0)))


def relative_precision(sample: ChargeSample) -> float:
    """Relative standard deviation of the unit that the own deviations allow once all numbers are known.

    Parameters
    ----------
    sample : ChargeSample
        Charges of one bench.

    Returns
    -------
    precision : float
        1 / sqrt(sum (q / s)^2).
    """
    charge, std = sample.independent
    return float(1 / np.sqrt(np.sum((charge / std) ** 2)))


def pooled_log_ratio(
    samples: tuple[ChargeSample, ...],
    centre: float,
    half_width: float,
    points: int,
    *,
    one_comb: bool = False,
) -> tuple[FloatArray, FloatArray]:
    """Log likelihood ratio near one frequency, each bench's common factor integrated over its prior.

    Parameters
    ----------
    samples : tuple of ChargeSample
        One for each bench. A single bench's factor cannot be told from the unit and stays at 1.
    centre : float
        Frequency in 1/C.
    half_width : float
        Of the window, relative, above 0.
    points : int
        Of the result; odd.
    one_comb : bool, optional
        True where the window holds one comb and its spacing is wanted: the likelihood of the charges given
        their numbers. The ratio to a smooth distribution, right for the choice between combs, carries one
        factor of the spacing for each charge that tells its number, and so draws a wide mode to large spacings.

    Returns
    -------
    frequency : ndarray of shape (points,)
        In 1/C, equal steps of its logarithm.
    log_ratio : ndarray of shape (points,)
        In nats, averaged over the nuisances.

    Notes
    -----
    A bench whose charges are all k times too large shows the frequency f / k; with k normal about 1 the
    likelihood of that bench is smoothed over ln f with the standard deviation of k.
    """
    step = 2 * half_width / (points - 1)
    log_f = np.log(centre) + step * (np.arange(points) - points // 2)
    total = np.zeros((len(STD_FACTORS) * len(OUTLIER_SHARES), points))
    for sample in samples:
        reach = 4 * sample.shared_rel_std if len(samples) > 1 else 0.0
        finest = min(step, 0.5 * relative_precision(sample)) if reach else step
        finest = max(finest, (half_width + reach) / 6000)
        over = max(1, round(step / finest))
        side = int(np.ceil(reach / step)) * over
        fine = np.log(centre) + step / over * (
            np.arange((points - 1) * over + 1 + 2 * side) - (points // 2) * over - side
        )
        values = log_ratios(sample, np.exp(fine))
        if one_comb:
            values = values + _numbers_told(sample, centre) * (fine - np.log(centre))
        total += _smooth(values, side, step / over / sample.shared_rel_std if side else 0.0)[:, ::over]
    return np.exp(log_f), log_mean_exp(total)


def _numbers_told(sample: ChargeSample, frequency: float) -> float:
    """Count the charges that tell their number: sharp ones are 1, blurred ones 0, half at 0.24 of the spacing."""
    _, std = sample.independent
    return float(np.sum(1 / (1 + (std * frequency / HALF_TOLD) ** 6)))


def _smooth(values: FloatArray, side: int, step: float) -> FloatArray:
    """Logarithm of exp(values) smoothed by a normal of unit width, cut by `side` points at both ends."""
    if side == 0:
        return values
    offset = step * np.arange(-side, side + 1)
    weight = np.exp(-0.5 * offset**2)
    windows = np.lib.stride_tricks.sliding_window_view(values, 2 * side + 1, axis=1)
    out = np.empty(windows.shape[:2])
    for row, window in enumerate(windows):
        for start in range(0, len(window), 500):
            part = window[start : start + 500]
            top = part.max(axis=1)
            out[row, start : start + 500] = top + np.log(np.exp(part - top[:, None]) @ weight / weight.sum())
    return out


def coarse_scan(
    samples: tuple[ChargeSample, ...], smallest: float, largest: float
) -> tuple[FloatArray, FloatArray]:
    """Statistic over all combs between two units, blurred so far that no peak falls between two points.

    Parameters
    ----------
    samples : tuple of ChargeSample
        One for each bench; with several, each bench's common factor is integrated over its prior.
    smallest, largest : float
        Units in C that bound the search.

    Returns
    -------
    frequency : ndarray of shape (F,)
        In 1/C, increasing.
    log_ratio : ndarray of shape (F,)
        In nats.

    Raises
    ------
    PhysicsError
        If the bounds are not 0 < smallest < largest, or there is no charge.
    """
    if not 0 < smallest < largest:
        raise PhysicsError("search", (smallest, largest), "two units in C, 0 < smallest < largest")
    top = max(sample.largest for sample in samples)
    if top <= 0:
        raise PhysicsError("charges", "none", "at least one charge that differs from 0")
    low, high = 1 / largest, 1 / smallest
    count = int(np.clip(np.ceil((high - low) * top / COARSE_PHASE_STEP), 200, 200_000)) + 1
    frequency = np.linspace(low, high, count)
    total = np.zeros((len(OUTLIER_SHARES), count))
    for sample in samples:
        spread = sample.shared_rel_std if len(samples) > 1 else 0.0
        total += _over_factors(sample, frequency, spread)
    return frequency, log_mean_exp(total)


def _over_factors(sample: ChargeSample, frequency: FloatArray, spread: float) -> FloatArray:
    """Coarse log ratios with the common factor integrated over a normal of relative width `spread`."""
    if spread == 0:
        return log_ratios(sample, frequency, coarse=True)
    step = frequency[1] - frequency[0]
    extra = int(np.ceil(3 * spread * frequency[-1] / step))
    grid = frequency[0] + step * np.arange(-extra, len(frequency) + extra)
    grid = grid[grid > 0]
    values = log_ratios(sample, grid, coarse=True)
    count = 2 * int(np.clip(np.ceil(3 * spread * frequency[-1] / step), 3, 100)) + 1
    offset = np.linspace(-3, 3, count)
    weight = np.exp(-0.5 * offset**2) / np.exp(-0.5 * offset**2).sum()
    out = np.empty((len(values), len(frequency)))
    for i, row in enumerate(values):
        shifted = np.stack([np.interp(frequency * (1 + spread * t), grid, row) for t in offset])
        top = shifted.max(axis=0)
        out[i] = top + np.log(weight @ np.exp(shifted - top))
    return out
