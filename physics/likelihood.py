"""Restricted likelihood of the place noise of one droplet, and the sums that all later work needs.

For each noise ratio rho = s^2 / D the covariance is known up to D, so speeds follow by generalised least squares
and D from what they leave. A handful of whitened sums per rho then stands for the whole track.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from physics.errors import PhysicsError
from physics.increments import FloatArray, Increments, gram_grid

__all__ = [
    "MIN_INCREMENTS",
    "Sums",
    "best_log_rho",
    "likelihood_grid",
    "sums_at",
]

MIN_INCREMENTS = 8  # fewer leave the variance so few degrees of freedom that no interval would hold
RHO_POINTS = (
    11  # where the law pins D, rho is known twice as well as in the free fit: still two points a deviation
)
LOG_DROP = 6.125  # nats: 3.5 standard deviations of a normal likelihood
COARSEST = 1.3  # of ln rho: the flank of the likelihood grows as fast as rho, so wider steps cut it short
NOISE_RANGE = (1e-3, 1e4)  # of rho over the median step; below 1e-3 the noise changes nothing
FLANK_DROP = 10.0  # nats: with few points inside, the next ones must be this near for the ends to be found
WIDE_POINTS = 17  # of a look at the whole range of ln rho
FIRST_REACH = 3.0  # of the first look, in ln rho to either side
LITTLE_NOISE = 0.03  # rho over the median step that counts as hardly any
FIELD_OFF = 1e-3  # V; below, the field counts as off: sums of volt seconds leave 1e-10 V of round-off
LEAST_DIFFUSION = 1e-20  # m^2/s; a droplet of 20 m would diffuse like this
SINGULAR = 1e-9  # relative: below, drift and drive are one column


@dataclass(frozen=True, slots=True)
class Sums:
    """Sufficient statistics on a grid of rho; what follows no longer depends on the track's length.

    K values of rho, P charge parts that saw the field. "Less the drives" is the Schur complement: what is
    left of a sum after the drives of all parts were fitted.
    """

    count: int  # steps; each axis has as many data
    parts: NDArray[np.int64]  # (P,) numbers of the parts
    log_rho: FloatArray  # (K,) increasing, ln s
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
        least = LEAST_DIFFUSION * self.degrees_of_freedom  # a spot that stands still to the last digit
        return np.maximum(self.data - explained + self.side_data, least)

    @property
    def degrees_of_freedom(self) -> int:
        """Data less fitted speeds."""
        return 2 * self.count - len(self.parts) - 1 - int(self.separable)

    @property
    def log_width(self) -> FloatArray:
        """(K,) ln of the width in ln rho that each point stands for (trapezoid rule)."""
        gaps = np.diff(self.log_rho)
        return np.asarray(np.log(0.5 * (np.append(gaps, 0.0) + np.append(0.0, gaps))))

    @property
    def restricted(self) -> FloatArray:
        """(K,) REML log likelihood of rho with D at its best, up to a constant."""
        own = np.log(self.drift) if self.separable else 0.0
        penalty = self.log_det + self.log_det_drive + own + np.log(self.side_drift)
        return np.asarray(-0.5 * (self.degrees_of_freedom * np.log(self.free_residual) + penalty))


def sums_at(steps: Increments, log_rho: FloatArray) -> Sums:
    """Sufficient statistics for each ln rho; one factorisation serves both axes if their noise is the same."""
    driven = np.abs(steps.impulse) > FIELD_OFF * steps.dt
    seen = [p for p in range(steps.parts) if np.any(driven[steps.part == p])]
    drives = [np.where(steps.part == p, steps.impulse, 0.0) for p in seen]
    columns, rho = [steps.dt, *drives, steps.down], np.exp(log_rho)
    if steps.same_noise:
        both, log_det = gram_grid(steps, rho, np.column_stack([*columns, steps.side]), "down")
        gram, side, side_log_det = both[:, :-1, :-1], both[:, [0, -1]][:, :, [0, -1]], log_det
    else:
        gram, log_det = gram_grid(steps, rho, np.column_stack(columns), "down")
        side, side_log_det = gram_grid(steps, rho, np.column_stack([steps.dt, steps.side]), "side")
    inverse = np.asarray(np.linalg.inv(gram[:, 1:-1, 1:-1]), dtype=np.float64)
    ends = gram[:, 1:-1][:, :, [0, -1]]  # G'g and G'y
    fitted = inverse @ ends
    schur = gram[:, [0, -1]][:, :, [0, -1]] - np.swapaxes(ends, 1, 2) @ fitted
    side_speed = side[:, 0, 1] / side[:, 0, 0]
    return Sums(
        count=len(steps), parts=np.array(seen, dtype=np.int64), log_rho=log_rho, log_det=log_det + side_log_det,
        drift=schur[:, 0, 0], drift_data=schur[:, 0, 1], data=schur[:, 1, 1],
        drive=fitted[:, :, 1], drive_slope=fitted[:, :, 0], drive_cov=inverse,
        log_det_drive=-np.linalg.slogdet(inverse)[1], side_drift=side[:, 0, 0], side_speed=side_speed,
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
    domain = np.log(np.median(steps.dt)) + np.log(NOISE_RANGE)
    grid = _first_look(steps, domain)
    for _ in range(8):
        sums = sums_at(steps, grid)
        drop = sums.restricted.max() - sums.restricted
        inside = np.flatnonzero(drop < LOG_DROP)
        first, last = max(inside[0] - 1, 0), min(inside[-1] + 1, len(grid) - 1)
        cut_low = inside[0] == 0 and grid[0] > domain[0]
        if cut_low or (inside[-1] == len(grid) - 1 and grid[-1] < domain[1]):
            grid = np.linspace(domain[0], domain[1], WIDE_POINTS)
        elif grid[1] - grid[0] < COARSEST and (len(inside) >= 3 or max(drop[first], drop[last]) < FLANK_DROP):
            break
        else:
            grid = np.linspace(grid[first], grid[last], points)
    low, high = _limits(sums, first, last)
    # even in ln(rho + c): the likelihood is normal in ln rho where the noise is known, in rho where it is not
    bend = (np.exp(high) - np.exp(grid[int(np.argmax(sums.restricted))])) / np.sqrt(2 * LOG_DROP)
    ends = np.log(np.exp([low, high]) + bend)
    return sums_at(steps, np.log(np.exp(np.linspace(ends[0], ends[1], points)) - bend))


def _first_look(steps: Increments, domain: FloatArray) -> FloatArray:
    """Grid of ln rho about the estimate from the side steps' variance and neighbour covariance."""
    side = steps.side - steps.dt * (steps.side.sum() / steps.dt.sum())
    moments = np.array([side @ side, side[:-1] @ (side[1:] * (steps.noise_off != 0))])
    shares = np.array([
        [steps.blur_diag.sum(), steps.side_noise_diag.sum()], [steps.blur_off.sum(), steps.side_noise_off.sum()]
    ])  # fmt: skip
    if np.linalg.det(shares) == 0:
        return np.linspace(domain[0], domain[1], WIDE_POINTS)
    diffusion, noise = np.linalg.solve(shares, moments)
    floor = LITTLE_NOISE * np.median(steps.dt)
    guess = np.log(np.maximum(noise / diffusion, floor)) if diffusion > 0 else domain[1]
    low = guess - FIRST_REACH if guess - FIRST_REACH > domain[0] + 1.0 else domain[0]
    return np.linspace(low, min(guess + FIRST_REACH, domain[1]), 9)


def _limits(sums: Sums, first: int, last: int) -> tuple[float, float]:
    """Find ln rho where the restricted likelihood has dropped by about `LOG_DROP` on either side.

    The root of the drop is straight in ln rho for a normal likelihood and grows as rho on a flank that leaves a
    plateau; interpolating its logarithm never ends too early.
    """
    grid = sums.log_rho
    root = np.log(np.sqrt(2 * (sums.restricted.max() - sums.restricted)) + 0.1)
    bound = np.log(np.sqrt(2 * LOG_DROP) + 0.1)
    beyond = root >= bound
    low, high = grid[first], grid[last]
    if beyond[first] and first + 1 < len(grid):
        low = np.interp(bound, root[[first + 1, first]], grid[[first + 1, first]])
    if beyond[last] and last > 0:
        high = np.interp(bound, root[[last - 1, last]], grid[[last - 1, last]])
    return float(low), float(high)


def best_log_rho(sums: Sums) -> float:
    """Most likely ln rho, by the parabola through the highest three points, which are even in ln(rho + c)."""
    top = int(np.argmax(sums.restricted))
    if top in (0, len(sums.log_rho) - 1):
        return float(sums.log_rho[top])
    rho, (left, middle, right) = np.exp(sums.log_rho[top - 1 : top + 2]), sums.restricted[top - 1 : top + 2]
    bend = (rho[1] ** 2 - rho[0] * rho[2]) / (rho[0] + rho[2] - 2 * rho[1])
    ratio = (rho[2] + bend) / (rho[1] + bend)
    shift = 0.5 * (left - right) / (left - 2 * middle + right)
    return float(np.log(max(rho[0], (rho[1] + bend) * ratio**shift - bend)))
