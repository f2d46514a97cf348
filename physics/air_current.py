"""Vertical speed of the air that all droplets of a recording share, from their Brownian motion."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from physics.droplet import Conditions
from physics.errors import PhysicsError
from physics.freefit import free_fit_of
from physics.increments import FloatArray, Increments
from physics.likelihood import MIN_INCREMENTS, likelihood_grid
from physics.posterior import SPEED_SPAN, Law, law_at, law_table, moments, radius_span

__all__ = ["air_current"]

AIR_POINTS = 41


def air_current(
    droplets: Sequence[Increments], conditions: Conditions, *, prior_std: float
) -> tuple[float, float]:
    """Vertical speed of the air common to all droplets, from Brownian motion against fall speed.

    Parameters
    ----------
    droplets : sequence of Increments
        Each of one droplet; those with too few steps or without fall speed add nothing.
    conditions : Conditions
        Air, oil, gravity, slip model.
    prior_std : float
        Standard deviation of the air speed before looking, in m/s (for example from the sideways drift);
        above 0.

    Returns
    -------
    speed : float
        In m/s, downward; posterior mean.
    std : float
        In m/s; `prior_std` when the droplets tell nothing.

    Raises
    ------
    PhysicsError
        If `prior_std` is not above 0.

    Notes
    -----
    At an assumed air speed the rest of the fall speed gives a radius, and with it a diffusion to be compared
    with the one seen. Each droplet's radius is integrated out with a prior that is flat in the parameter
    orthogonal to the air speed (Cox and Reid), so that many droplets do not add up a bias.

    References
    ----------
    .. [1] D. R. Cox, N. Reid, Parameter orthogonality and approximate conditional inference,
       J. R. Stat. Soc. B 49 (1987), 1-39.
    """
    if not prior_std > 0:
        raise PhysicsError("prior_std", prior_std, "above 0 m/s")
    table = law_table(conditions)
    prepared = [_air_terms(steps, table, conditions, 5 * prior_std) for steps in droplets]
    terms = [term for term in prepared if term is not None]
    speeds = prior_std * np.linspace(-5, 5, AIR_POINTS)
    mean, std = 0.0, prior_std
    for _ in range(4):
        total = -0.5 * (speeds / prior_std) ** 2 + sum(term.log_likelihood(speeds) for term in terms)
        weights = np.exp(total - total.max())
        mean, std = moments(weights / weights.sum(), speeds)
        if std > 2 * (speeds[1] - speeds[0]):
            break
        speeds = mean + max(5 * std, 3 * (speeds[1] - speeds[0])) * np.linspace(-1, 1, AIR_POINTS)
    return mean, std


@dataclass(frozen=True, slots=True)
class _AirTerms:
    """Log likelihood of one droplet, constant + slope w - bend w^2 / 2, w = speed + u, on a grid of ln r, ln rho."""

    speed: FloatArray  # (R,)
    constant: FloatArray  # (R, K)
    slope: FloatArray  # (R, K)
    bend: FloatArray  # (R, K)

    def log_likelihood(self, air_speeds: FloatArray) -> FloatArray:
        """Integrate radius and noise out at each air speed."""
        drift = (self.speed[:, None] + air_speeds)[:, None, :]
        value = self.constant[:, :, None] + drift * (
            self.slope[:, :, None] - 0.5 * self.bend[:, :, None] * drift
        )
        top = value.max()
        return np.asarray(top + np.log(np.maximum(np.exp(value - top).sum(axis=(0, 1)), 1e-300)))


def _air_terms(steps: Increments, table: Law, conditions: Conditions, reach: float) -> _AirTerms | None:
    """Prepare one droplet for `air_current`; None if it has no say."""
    if len(steps) < MIN_INCREMENTS:
        return None
    sums = likelihood_grid(steps)
    fit = free_fit_of(steps, sums)
    if not sums.separable:
        return None
    span = radius_span(fit, table, 0.0, reach / SPEED_SPAN)
    if span is None or span[2]:
        return None
    ends = np.interp(span[:2], table.log_radius, table.speed)
    points = int(np.clip((ends[1] - ends[0]) / (0.7 * fit.fall_speed_std), 60, 600))
    law = law_at(np.linspace(span[0], span[1], points), conditions)
    slope = np.gradient(law.speed, law.log_radius)
    by_motion = fit.log_diffusion_std / np.abs(np.gradient(np.log(law.diffusion), law.log_radius))
    orthogonal = slope + (fit.fall_speed_std / by_motion) ** 2 / slope
    diffusion = law.diffusion[:, None]
    constant = (
        np.log(orthogonal)[:, None] - 0.5 * (2 * sums.count - len(sums.parts) - 1) * np.log(diffusion)
        - 0.5 * (sums.log_det + sums.log_det_drive + np.log(sums.side_drift))
        - 0.5 * (sums.data + sums.side_data) / diffusion
    )  # fmt: skip
    return _AirTerms(law.speed, constant, sums.drift_data / diffusion, sums.drift / diffusion)
