"""Speeds, diffusion and place noise of one droplet from its steps, without the law that ties them to a radius.

Generalised least squares for the speeds and restricted maximum likelihood (REML) for the variances, on the
covariance of `physics.increments`. It is the answer of a Kalman smoother and reaches the Cramer-Rao bound.

References
----------
.. [1] H. D. Patterson, R. Thompson, Recovery of inter-block information when block sizes are unequal,
   Biometrika 58 (1971), 545-554 (REML).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.linalg import lapack

from physics.errors import PhysicsError
from physics.increments import Axis, FloatArray, Increments, Whitened, freeze_arrays, whiten, whitened
from physics.likelihood import MIN_INCREMENTS, Sums, best_log_rho, likelihood_grid, sums_at

__all__ = [
    "FreeFit",
    "SegmentSpeeds",
    "free_fit",
    "robust_increments",
    "segment_speeds",
]

STRAY_SCALE = 0.85  # strays widen the fitted noise: below this, residuals are scaled by their median instead


@dataclass(frozen=True, slots=True)
class FreeFit:
    """Speeds and variances of one droplet, no law assumed; NaN where the schedule cannot tell them apart.

    Standard deviations are absolute and come from Brownian motion and place noise alone.
    """

    fall_speed: float  # m/s, downward: field-off speed in the laboratory, air current included
    fall_speed_std: float  # m/s
    drive_per_volt: FloatArray  # (parts,) m/s per V, downward for a top plate at +1 V
    drive_per_volt_std: FloatArray  # (parts,)
    covariance: FloatArray  # (1 + parts, 1 + parts) of fall_speed and drive_per_volt
    side_speed: float  # m/s
    side_speed_std: float  # m/s
    diffusion: float  # m^2/s
    log_diffusion_std: float  # of ln D, noise integrated
    log_rho: float  # ln(noise variance of a typical place / D), ln s
    log_rho_std: float
    noise_std: float  # m, of a typical place (relative weight 1)
    dof: int
    down_residuals: FloatArray  # (steps,) whitened: standard normal if the model holds
    side_residuals: FloatArray  # (steps,)
    grid: Sums  # over the likely place noise, from which all of it follows

    def __post_init__(self) -> None:
        freeze_arrays(self, _FIT_ARRAYS)


_FIT_ARRAYS = ("drive_per_volt", "drive_per_volt_std", "covariance", "down_residuals", "side_residuals")


def free_fit(steps: Increments) -> FreeFit:
    """Fit fall speed, drives, side speed, diffusion and place noise of one droplet.

    Parameters
    ----------
    steps : Increments
        At least `MIN_INCREMENTS` steps.

    Returns
    -------
    fit : FreeFit
        Speeds by generalised least squares at the best rho, D = Q/dof, ln rho by REML [1]_ with both axes. A
        part that never saw the field has a NaN drive; if one voltage held all the time, fall speed and drive
        are NaN, but diffusion and noise stand.

    Raises
    ------
    PhysicsError
        If there are fewer than `MIN_INCREMENTS` steps.

    References
    ----------
    .. [1] H. D. Patterson, R. Thompson, Biometrika 58 (1971), 545-554.
    """
    grid = likelihood_grid(steps)
    weight = np.exp(grid.restricted - grid.restricted.max() + grid.log_width)
    weight /= weight.sum()
    log_rho_mean = weight @ grid.log_rho
    log_q = np.log(grid.free_residual)
    log_var = 2 / grid.degrees_of_freedom + weight @ log_q**2 - (weight @ log_q) ** 2
    best = sums_at(steps, np.array([best_log_rho(grid)]))
    diffusion = float(best.free_residual[0]) / best.degrees_of_freedom
    speeds, covariance = _speeds(best, steps.parts, diffusion)
    down, side = _residuals(steps, best, diffusion)
    return FreeFit(
        fall_speed=float(speeds[0]), fall_speed_std=float(np.sqrt(covariance[0, 0])),
        drive_per_volt=speeds[1:], drive_per_volt_std=np.sqrt(np.diag(covariance)[1:]), covariance=covariance,
        side_speed=float(best.side_speed[0]), side_speed_std=float(np.sqrt(diffusion / best.side_drift[0])),
        diffusion=diffusion, log_diffusion_std=float(np.sqrt(log_var)), log_rho=float(best.log_rho[0]),
        log_rho_std=float(np.sqrt(weight @ grid.log_rho**2 - log_rho_mean**2)),
        noise_std=float(np.sqrt(np.exp(best.log_rho[0]) * diffusion)), dof=best.degrees_of_freedom,
        down_residuals=down, side_residuals=side, grid=grid,
    )  # fmt: skip


def _speeds(best: Sums, parts: int, diffusion: float) -> tuple[FloatArray, FloatArray]:
    """Fall speed and drives of all parts with their covariance; NaN where they cannot be had."""
    speeds, covariance = np.full(1 + parts, np.nan), np.full((1 + parts, 1 + parts), np.nan)
    if best.separable:
        fall = best.drift_data[0] / best.drift[0]
        slope = np.concatenate([[1.0], -best.drive_slope[0]])
        inner = np.zeros((len(slope), len(slope)))
        inner[1:, 1:] = best.drive_cov[0]
        rows = np.concatenate([[0], 1 + best.parts])
        speeds[rows] = np.concatenate([[0.0], best.drive[0]]) + slope * fall
        covariance[np.ix_(rows, rows)] = diffusion * (inner + np.outer(slope, slope) / best.drift[0])
    return speeds, covariance


def _residuals(steps: Increments, best: Sums, diffusion: float) -> tuple[FloatArray, FloatArray]:
    """Whitened residuals of both axes, unit variance."""
    fall = best.drift_data[0] / best.drift[0] if best.separable else 0.0
    drives = np.zeros(steps.parts)
    drives[best.parts] = best.drive[0] - best.drive_slope[0] * fall
    down = steps.down - fall * steps.dt - drives[steps.part] * steps.impulse
    side = steps.side - best.side_speed[0] * steps.dt
    rho = float(np.exp(best.log_rho[0]))
    white = (whiten(steps, rho, down[:, None], "down")[0], whiten(steps, rho, side[:, None], "side")[0])
    return white[0][:, 0] / np.sqrt(diffusion), white[1][:, 0] / np.sqrt(diffusion)


@dataclass(frozen=True, slots=True)
class SegmentSpeeds:
    """Mean speed of one droplet in each segment, all segments fitted together; NaN where it was not seen."""

    down: FloatArray  # (S,) m/s
    down_std: FloatArray  # (S,) m/s, Brownian motion and place noise
    down_cov: FloatArray  # (S, S)
    side: FloatArray  # (S,) m/s
    side_std: FloatArray  # (S,) m/s
    side_cov: FloatArray  # (S, S)
    steps: NDArray[np.int64]  # (S,) steps that lie in each segment for the most part

    def __post_init__(self) -> None:
        freeze_arrays(self, ("down", "down_std", "down_cov", "side", "side_std", "side_cov", "steps"))


def segment_speeds(steps: Increments, segments: ArrayLike, *, diffusion: float, rho: float) -> SegmentSpeeds:
    """Best linear unbiased speeds of one droplet in each segment.

    Parameters
    ----------
    steps : Increments
        Of one droplet.
    segments : array_like of shape (N,) or (N, S)
        Number of the segment of each step, -1 for none; or `segment_occupancy` of the steps in s, which also
        uses steps across a change. Steps that are not wholly covered by segments are left out.
    diffusion : float
        D in m^2/s of the whole track (`free_fit`), not of the segment alone.
    rho : float
        Noise variance of a typical place over D, in s.

    Returns
    -------
    speeds : SegmentSpeeds
        Generalised least squares on the steps of all segments together.
    """
    given = np.asarray(segments)
    if given.shape[:1] != (len(steps),):
        raise PhysicsError("segments", given.shape, f"one row for each of the {len(steps)} steps")
    if given.ndim == 1:
        numbers = np.arange(int(given.max(initial=-1)) + 1)
        occupancy = np.where(given[:, None] == numbers, steps.dt[:, None], 0.0)
    else:
        occupancy = given.astype(np.float64)
    keep = np.abs(occupancy.sum(axis=1) - steps.dt) <= 1e-6 * steps.dt
    kept, used = steps.select(keep), occupancy[keep]
    down = _segment_axis(whitened(kept, diffusion=diffusion, rho=rho, columns=used))
    side = _segment_axis(whitened(kept, diffusion=diffusion, rho=rho, columns=used, axis="side"))
    return SegmentSpeeds(*down, *side, steps=(used > 0.5 * kept.dt[:, None]).sum(axis=0))


def _segment_axis(white: Whitened) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Speeds, their standard deviations and covariance by least squares on whitened columns."""
    gram = white.columns.T @ white.columns
    seen = np.flatnonzero(np.diag(gram) > 0)
    speed, covariance = np.full(len(gram), np.nan), np.full(gram.shape, np.nan)
    inverse = np.linalg.inv(gram[np.ix_(seen, seen)])
    speed[seen] = inverse @ (white.columns[:, seen].T @ white.data)
    covariance[np.ix_(seen, seen)] = inverse
    return speed, np.sqrt(np.diag(covariance)), covariance


def robust_increments(
    steps: Increments, *, limit: float = 5.0, rounds: int = 4
) -> tuple[Increments, NDArray[np.int64], FreeFit | None]:
    """Leave out sightings that lie much farther from their neighbours than the model allows.

    Parameters
    ----------
    steps : Increments
        Of one droplet.
    limit : float
        In standard deviations; 5 leaves out one good sighting in 1.7 million.
    rounds : int
        At most so many fits; each can only mark sightings that are not next to each other.

    Returns
    -------
    steps : Increments
        With each marked sighting treated as a missing frame.
    sightings : ndarray of int
        The marked ones, indices of the arrays that `steps` was made from, increasing.
    fit : FreeFit or None
        Of what is left, if that was fitted on the way: it was unless steps are few or strays many.

    Notes
    -----
    The statistic of a sighting is that of one more parameter, an offset of this place alone, in the whitened
    fit (deletion residual): for Gaussian noise it is standard normal whatever the noise and the diffusion.
    Where a lasting jump in one of the two steps fits better, the sighting stays.
    """
    out: list[int] = []
    fit = None
    for _ in range(rounds):
        if len(steps) < 2 * MIN_INCREMENTS:
            break
        fit = free_fit(steps)
        marked = _outliers(steps, fit, limit)
        if not len(marked):
            break
        out.extend(marked.tolist())
        steps, fit = steps.without_sightings(marked), None
    return steps, np.array(sorted(out), dtype=np.int64), fit


def _outliers(steps: Increments, fit: FreeFit, limit: float) -> NDArray[np.int64]:
    """Sightings between two joined steps whose offset statistic exceeds `limit` and tops its neighbours'."""
    joined = np.flatnonzero(steps.last[:-1] == steps.first[1:])
    rho = float(np.exp(fit.log_rho))
    worst = np.zeros(len(joined))
    axes: tuple[tuple[Axis, FloatArray], ...] = (("down", fit.down_residuals), ("side", fit.side_residuals))
    for axis, white in axes:
        worst = np.maximum(worst, _offset_scores(steps, white, rho, axis)[joined])
    padded = np.pad(worst, 2)
    around = np.max([padded[i : i + len(worst)] for i in range(5)], axis=0)
    return np.asarray(steps.last[joined[(worst > limit) & (worst >= around)]])


def _offset_scores(steps: Increments, white: FloatArray, rho: float, axis: Axis) -> FloatArray:
    """Size of the offset of the sighting between steps k and k + 1, for all k; 0 where a jump in a step fits better.

    Columns of L^-1 are needed: with unit offset m_k = e_k - e_k+1 the score is m_k' C^-1 r / sqrt(m_k' C^-1 m_k);
    the three elements of C^-1 come from the pivots of C taken from both ends.
    """
    down = axis == "down"
    diagonal = steps.blur_diag + rho * (steps.noise_diag if down else steps.side_noise_diag)
    off = steps.blur_off + rho * (steps.noise_off if down else steps.side_noise_off)
    forward, lower, _ = lapack.dpttrf(diagonal, off)
    backward, _, _ = lapack.dpttrf(diagonal[::-1], off[::-1])
    inverse = 1 / (forward + backward[::-1] - diagonal)
    beside = -lower * inverse[1:]
    raw = white * np.sqrt(forward)  # L D^1/2 w = r, so L^-1 r in unit-lower form
    solved, _ = lapack.dtbtrs(
        np.stack([np.ones(len(raw)), np.append(lower, 0.0)]), raw / forward, uplo="L", trans="T", diag="U"
    )
    a = solved.ravel()
    offset = (a[:-1] - a[1:]) / np.sqrt(inverse[:-1] + inverse[1:] - 2 * beside)
    jump = np.abs(a) / np.sqrt(inverse)
    typical = 1.4826 * float(np.median(np.abs(offset)))
    size = np.abs(offset) / (typical if 0 < typical < STRAY_SCALE else 1.0)
    return np.where(np.abs(offset) > np.maximum(jump[:-1], jump[1:]), size, 0.0)
