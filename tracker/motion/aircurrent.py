"""The air that carries all droplets of a recording: its steady speed, and how it changes slowly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from physics.droplet import Conditions
from physics.motion import FreeFit, Increments, air_current
from tracker.records import FloatArray

LEAST_PRIOR = 1e-8  # m/s; slower air moves no droplet by more than it diffuses in minutes


@dataclass(frozen=True, slots=True)
class AirCurrent:
    """Speed of the air along and across gravity, common to all droplets of a recording."""

    down: float  # m/s
    down_std: float  # m/s
    side: float  # m/s
    side_std: float  # m/s
    droplets: int  # that it rests on

    def plain(self) -> dict[str, float | int]:
        """Give plain values for provenance."""
        return {
            "down_m_s": self.down, "down_std_m_s": self.down_std, "side_m_s": self.side,
            "side_std_m_s": self.side_std, "droplets": self.droplets,
        }  # fmt: skip


def find_air_current(
    steps: Sequence[Increments], fits: Sequence[FreeFit], conditions: Conditions
) -> AirCurrent:
    """Find the air's speed from what all droplets share.

    Parameters
    ----------
    steps : sequence of Increments
        Of each droplet.
    fits : sequence of FreeFit
        The same droplets.
    conditions : Conditions
        Of the bench.

    Returns
    -------
    current : AirCurrent
        Across gravity the weighted mean of the droplets' side speeds. Along gravity the air adds to every fall
        speed; only Brownian motion tells the two apart, and weakly, so the side speed serves as the prior's
        width: air in a cell moves about as fast along as across.
    """
    if not fits:
        return AirCurrent(0.0, 0.0, 0.0, 0.0, 0)
    speeds = np.array([fit.side_speed for fit in fits])
    stds = np.array([fit.side_speed_std for fit in fits])
    side, side_std = robust_mean(speeds, stds)
    prior = max(float(np.hypot(side, side_std)), LEAST_PRIOR)
    down, down_std = air_current(steps, conditions, prior_std=prior)
    return AirCurrent(down, down_std, side, side_std, len(fits))


def robust_mean(values: FloatArray, stds: FloatArray) -> tuple[float, float]:
    """Weighted mean that single strange values do not move.

    Parameters
    ----------
    values, stds : ndarray of shape (N,)
        N >= 1; stds above 0.

    Returns
    -------
    mean, std : float
        Of the values within 3.29 of their standard deviations of the mean, found by iteration from the median.
    """
    mean, std = float(np.median(values)), float(np.median(stds))
    for _ in range(10):
        near = np.abs(values - mean) <= 3.29 * np.hypot(stds, std)
        if not np.any(near):
            near = np.ones(len(values), bool)
        weight = near / stds**2
        new = float(weight @ values / weight.sum())
        std = float(1 / np.sqrt(weight.sum()))
        if new == mean:
            break
        mean = new
    return mean, std
