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
from physics.increments import Axis, FloatArray, Increments, Whitened, whiten_grid, whitened

__all__ = [
    "MIN_INCREMENTS",
    "FreeFit",
    "SegmentSpeeds",
    "Sums",
    "free_fit",
    "likelihood_grid",
    "robust_increments",
    "segment_speeds",
]

MIN_INCREMENTS = 8  # fewer leave the variance so few degrees of freedom that no interval would hold
RHO_POINTS = 9  # over +-3.5 standard deviations the trapezoid rule is exact to 1e-3
LOG_DROP = 6.125  # nats: 3.5 standard deviations of a normal likelihood
NOISE_RANGE = (1e-3, 1e4)  # of rho over the median step; below 1e-3 the noise changes nothing
SINGULAR = 1e-9  # relative: below, drift and drive are one column


@dataclass(frozen=True, slots=True)
class Sums:
    """Sufficient statistics on a grid of rho; what follows no longer depends on the track's length.

    K values of rho, P charge parts that saw the field. "Less the drives" is the Schur complement: what is
    left of a sum after the drives of all parts were fitted.
    """

    count: int  # steps; each axis has as many data
    parts: NDArray[np.int64]  # (P,) numbers of the parts
    log_rho: FloatArray  # (K,) evenly spaced, ln s
    log_det: FloatArray  # (K,) of A + rho M, both axes together
    drift: FloatArray  # (K,) g'g less the drives
    drift_data: FloatArray  # (K,) g'y less the drives
    data: FloatArray  # (K,) y'y less the drives
    drive: FloatArray  # (K, P) drive per volt at zero drift
    drive_slope: FloatArray  # (K, P) what one unit of drift takes from it
    drive_cov: FloatArray  # (K, P, P) inverse of G'G
    log_det_drive: FloatArray  # (K,) of G'G
    side_drift: FloatArray  # (K,) g'g across
    side_speed: FloatArray  # (K,) m/s
    side_data: FloatArray  # (K,) x'x less the fitted side speed
    separable: bool  # drift and drives are different columns

    @property
    def free_residual(self) -> FloatArray:
        """(K,) sum of squares that the free fit leaves, both axes."""
        explained = self.drift_data**2 / self.drift if self.separable else 0.0
        return np.asarray(self.data - explained + self.side_data)

    @property
    def degrees_of_freedom(self) -> int:
        """Data less fitted speeds."""
        return 2 * self.count - len(self.parts) - 1 - int(self.separable)

    @property
    def restricted(self) -> FloatArray:
        """(K,) REML log likelihood of rho with D at its best, up to a constant."""
        own = np.log(self.drift) if self.separable else 0.0
        penalty = self.log_det + self.log_det_drive + own + np.log(self.side_drift)
        return np.asarray(-0.5 * (self.degrees_of_freedom * np.log(self.free_residual) + penalty))


def _sums(steps: Increments, log_rho: FloatArray) -> Sums:
    """Sufficient statistics for each rho; see `Sums`."""
    seen = [p for p in range(steps.parts) if np.any(steps.impulse[steps.part == p] != 0)]
    drives = [np.where(steps.part == p, steps.impulse, 0.0) for p in seen]
    columns = np.column_stack([steps.dt, *drives, steps.down])
    side_columns = np.column_stack([steps.dt, steps.side])
    rho = np.exp(log_rho)
    if steps.same_noise:
        white, log_det = whiten_grid(steps, rho, np.column_stack([columns, steps.side]), "down")
        gram = np.swapaxes(white, 1, 2) @ white
        side, side_log_det = gram[:, [0, -1]][:, :, [0, -1]], log_det
        gram = gram[:, :-1, :-1]
    else:
        white, log_det = whiten_grid(steps, rho, columns, "down")
        gram = np.swapaxes(white, 1, 2) @ white
        white, side_log_det = whiten_grid(steps, rho, side_columns, "side")
        side = np.swapaxes(white, 1, 2) @ white
    inner = gram[:, 1:-1, 1:-1]
    inverse = np.asarray(np.linalg.inv(inner), dtype=np.float64)
    ends = gram[:, 1:-1][:, :, [0, -1]]  # G'g and G'y
    fitted = inverse @ ends
    schur = gram[:, [0, -1]][:, :, [0, -1]] - np.swapaxes(ends, 1, 2) @ fitted
    side_speed = side[:, 0, 1] / side[:, 0, 0]
    return Sums(
        count=len(steps), parts=np.array(seen, dtype=np.int64), log_rho=log_rho, log_det=log_det + side_log_det,
        drift=schur[:, 0, 0], drift_data=schur[:, 0, 1], data=schur[:, 1, 1],
        drive=fitted[:, :, 1], drive_slope=fitted[:, :, 0], drive_cov=inverse,
        log_det_drive=np.linalg.slogdet(inner)[1], side_drift=side[:, 0, 0], side_speed=side_speed,
        side_data=side[:, 1, 1] - side_speed * side[:, 0, 1],
        separable=bool(np.all(schur[:, 0, 0] > SINGULAR * gram[:, 0, 0])),
    )  # fmt: skip


def likelihood_grid(steps: Increments, *, points: int = RHO_POINTS) -> Sums:
    """Sufficient statistics on a grid of ln rho that holds the restricted likelihood of the noise.

    Parameters
    ----------
    steps : Increments
        At least `MIN_INCREMENTS` steps.
    points : int
        Of the grid.

    Returns
    -------
    sums : Sums
        From 3.5 standard deviations below the best to 3.5 above. Where the noise cannot be told from none,
        the grid begins at rho = 1e-3 of the median step, where it has no effect any more.
    """
    if len(steps) < MIN_INCREMENTS:
        raise PhysicsError("increments", len(steps), f"at least {MIN_INCREMENTS}")
    low, high = np.log(np.median(steps.dt)) + np.log(NOISE_RANGE)
    grid = np.linspace(low, high, points + 2)
    for _ in range(8):
        sums = _sums(steps, grid)
        drop = sums.restricted.max() - sums.restricted
        inside = np.flatnonzero(drop < LOG_DROP)
        first, last = max(inside[0] - 1, 0), min(inside[-1] + 1, len(grid) - 1)
        if len(inside) >= 3 and len(inside) <= points - 2:
            break
        grid = np.linspace(grid[first], grid[last], points)
    return _sums(steps, np.linspace(*_limits(sums, first, last), points))


def _vertex(grid: FloatArray, value: FloatArray) -> tuple[float, float]:
    """Place and height of the top of values on an even grid, by the parabola through the highest three."""
    top = int(np.argmax(value))
    if top in (0, len(grid) - 1):
        return float(grid[top]), float(value[top])
    left, middle, right = value[top - 1 : top + 2]
    bend = left - 2 * middle + right
    shift = 0.5 * (left - right) / bend
    return float(grid[top] + shift * (grid[1] - grid[0])), float(middle - 0.25 * (left - right) * shift)


def _limits(sums: Sums, first: int, last: int) -> tuple[float, float]:
    """Find ln rho where the restricted likelihood has dropped by `LOG_DROP` on either side."""
    grid, value = sums.log_rho, sums.restricted
    top, height = _vertex(grid, value)
    root = np.sign(grid - top) * np.sqrt(2 * np.maximum(height - value, 0.0))  # straight for a parabola
    bound = np.sqrt(2 * LOG_DROP)
    below = np.flatnonzero(root <= -bound)
    above = np.flatnonzero(root >= bound)
    low, high = grid[first], grid[last]
    if len(below) and below[-1] + 1 < len(grid):
        i = below[-1]
        low = np.interp(-bound, root[i : i + 2], grid[i : i + 2])
    if len(above) and above[0] > 0:
        i = above[0] - 1
        high = np.interp(bound, root[i : i + 2], grid[i : i + 2])
    return float(low), float(high)


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
    return free_fit_of(steps, likelihood_grid(steps))


def free_fit_of(steps: Increments, grid: Sums) -> FreeFit:
    """Give the free fit that belongs to the statistics of a likelihood grid."""
    weight = np.exp(grid.restricted - grid.restricted.max())
    weight /= weight.sum()
    log_rho_mean = weight @ grid.log_rho
    log_q = np.log(grid.free_residual)
    log_var = 2 / grid.degrees_of_freedom + weight @ log_q**2 - (weight @ log_q) ** 2
    best = _sums(steps, np.array([_vertex(grid.log_rho, grid.restricted)[0]]))
    diffusion = float(best.free_residual[0]) / best.degrees_of_freedom
    speeds, covariance = _speeds(best, steps.parts, diffusion)
    rho = float(np.exp(best.log_rho[0]))
    down, side = _residuals(steps, best, diffusion, rho)
    return FreeFit(
        fall_speed=float(speeds[0]), fall_speed_std=float(np.sqrt(covariance[0, 0])),
        drive_per_volt=speeds[1:], drive_per_volt_std=np.sqrt(np.diag(covariance)[1:]), covariance=covariance,
        side_speed=float(best.side_speed[0]), side_speed_std=float(np.sqrt(diffusion / best.side_drift[0])),
        diffusion=diffusion, log_diffusion_std=float(np.sqrt(log_var)), log_rho=float(best.log_rho[0]),
        log_rho_std=float(np.sqrt(weight @ grid.log_rho**2 - log_rho_mean**2)),
        noise_std=float(np.sqrt(rho * diffusion)), dof=best.degrees_of_freedom,
        down_residuals=down, side_residuals=side,
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


def _residuals(steps: Increments, best: Sums, diffusion: float, rho: float) -> tuple[FloatArray, FloatArray]:
    """Whitened residuals of both axes."""
    drives = np.zeros(steps.parts)
    fall = best.drift_data[0] / best.drift[0] if best.separable else 0.0
    drives[best.parts] = best.drive[0] - best.drive_slope[0] * fall
    mean = np.column_stack(
        [fall * steps.dt + drives[steps.part] * steps.impulse, best.side_speed[0] * steps.dt]
    )
    down = whitened(steps, diffusion=diffusion, rho=rho, columns=mean[:, 0])
    side = whitened(steps, diffusion=diffusion, rho=rho, columns=mean[:, 1], axis="side")
    return down.data - down.columns[:, 0], side.data - side.columns[:, 0]


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
) -> tuple[Increments, NDArray[np.int64]]:
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

    Notes
    -----
    The statistic of a sighting is that of one more parameter, an offset of this place alone, in the whitened
    fit (deletion residual): for Gaussian noise it is standard normal whatever the noise and the diffusion.
    A lasting jump is no such offset and stays.
    """
    out: list[int] = []
    for _ in range(rounds):
        if len(steps) < 2 * MIN_INCREMENTS:
            break
        marked = _outliers(steps, free_fit(steps), limit)
        if not len(marked):
            break
        out.extend(marked.tolist())
        steps = steps.without_sightings(marked)
    return steps, np.array(sorted(out), dtype=np.int64)


def _outliers(steps: Increments, fit: FreeFit, limit: float) -> NDArray[np.int64]:
    """Sightings between two joined steps whose offset statistic exceeds `limit` and tops its neighbours'."""
    joined = np.flatnonzero(steps.last[:-1] == steps.first[1:])
    rho = float(np.exp(fit.log_rho))
    worst = np.zeros(len(joined))
    axes: tuple[tuple[Axis, FloatArray], ...] = (("down", fit.down_residuals), ("side", fit.side_residuals))
    for axis, white in axes:
        score = _offset_scores(steps, white, rho, axis)[joined]
        worst = np.maximum(worst, np.abs(score) / min(1.0, 1.4826 * float(np.median(np.abs(score)))))
    rank = np.array([worst[max(0, i - 2) : i + 3].max() for i in range(len(worst))])
    return np.asarray(steps.last[joined[(worst > limit) & (worst >= rank)]])


def _offset_scores(steps: Increments, white: FloatArray, rho: float, axis: Axis) -> FloatArray:
    """Offset statistic of the sighting between steps k and k + 1, for all k, from whitened residuals.

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
    return np.asarray((a[:-1] - a[1:]) / np.sqrt(inverse[:-1] + inverse[1:] - 2 * beside))
