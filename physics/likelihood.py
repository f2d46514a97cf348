"""Restricted likelihood of the place noise of one droplet, and the sums that all later work needs.

For each noise ratio rho = s^2 / D the covariance is known up to D, so speeds follow by generalised least squares
and D from what they leave. A handful of whitened sums per rho then stands for the whole track.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from physics.errors import PhysicsError
from physics.increments import FloatArray, Increments, whiten_grid

__all__ = [
    "MIN_INCREMENTS",
    "Design",
    "Sums",
    "best_log_rho",
    "likelihood_grid",
    "sums_of",
    "whitened_design",
]

MIN_INCREMENTS = 8  # fewer leave the variance so few degrees of freedom that no interval would hold
RHO_POINTS = 9  # over +-3.5 standard deviations the trapezoid rule is exact to 1e-3
LOG_DROP = 6.125  # nats: 3.5 standard deviations of a normal likelihood
NOISE_RANGE = (1e-3, 1e4)  # of rho over the median step; below 1e-3 the noise changes nothing
FIELD_OFF = 1e-3  # V; below, the field counts as off: sums of volt seconds leave 1e-10 V of round-off
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


@dataclass(frozen=True, slots=True)
class Design:
    """Whitened columns of both axes for K values of rho; variance D is left in them."""

    parts: NDArray[np.int64]  # (P,) charge parts that saw the field
    log_rho: FloatArray  # (K,)
    down: FloatArray  # (K, N, 2 + P) drift, drives, data
    side: FloatArray  # (K, N, 2) drift, data
    log_det: FloatArray  # (K,) of both axes


def whitened_design(steps: Increments, log_rho: FloatArray) -> Design:
    """Whiten drift, drives and data of both axes by A + rho M; one factorisation if their noise is the same."""
    driven = np.abs(steps.impulse) > FIELD_OFF * steps.dt
    seen = [p for p in range(steps.parts) if np.any(driven[steps.part == p])]
    drives = [np.where(steps.part == p, steps.impulse, 0.0) for p in seen]
    columns = [steps.dt, *drives, steps.down]
    rho = np.exp(log_rho)
    if steps.same_noise:
        both, log_det = whiten_grid(steps, rho, np.column_stack([*columns, steps.side]), "down")
        down, side, side_log_det = both[:, :, :-1], both[:, :, [0, -1]], log_det
    else:
        down, log_det = whiten_grid(steps, rho, np.column_stack(columns), "down")
        side, side_log_det = whiten_grid(steps, rho, np.column_stack([steps.dt, steps.side]), "side")
    return Design(np.array(seen, dtype=np.int64), log_rho, down, side, log_det + side_log_det)


def sums_of(design: Design) -> Sums:
    """Reduce a whitened design to its sufficient statistics."""
    gram = np.swapaxes(design.down, 1, 2) @ design.down
    side = np.swapaxes(design.side, 1, 2) @ design.side
    inner = gram[:, 1:-1, 1:-1]
    inverse = np.asarray(np.linalg.inv(inner), dtype=np.float64)
    ends = gram[:, 1:-1][:, :, [0, -1]]  # G'g and G'y
    fitted = inverse @ ends
    schur = gram[:, [0, -1]][:, :, [0, -1]] - np.swapaxes(ends, 1, 2) @ fitted
    side_speed = side[:, 0, 1] / side[:, 0, 0]
    return Sums(
        count=design.down.shape[1], parts=design.parts, log_rho=design.log_rho, log_det=design.log_det,
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
        sums = sums_of(whitened_design(steps, grid))
        drop = sums.restricted.max() - sums.restricted
        inside = np.flatnonzero(drop < LOG_DROP)
        first, last = max(inside[0] - 1, 0), min(inside[-1] + 1, len(grid) - 1)
        if len(inside) >= 3 and len(inside) <= points - 2:
            break
        grid = np.linspace(grid[first], grid[last], points)
    return sums_of(whitened_design(steps, np.linspace(*_limits(sums, first, last), points)))


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


def best_log_rho(sums: Sums) -> float:
    """Most likely ln rho, by the parabola through the highest three points."""
    return _vertex(sums.log_rho, sums.restricted)[0]
