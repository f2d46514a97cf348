"""Vertical speed of the air that all droplets of a recording share, from their Brownian motion."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.special import logsumexp

from physics.droplet import Conditions
from physics.errors import PhysicsError
from physics.freefit import FreeFit, free_fit
from physics.increments import FloatArray, Increments
from physics.likelihood import MIN_INCREMENTS
from physics.posterior import Law, law_table, moments

__all__ = ["air_current"]

AIR_POINTS = 41
SPAN = 5.0  # standard deviations of ln D that each droplet's radius may lie from its diffusion


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
    fits = [free_fit(steps) for steps in droplets if len(steps) >= MIN_INCREMENTS]
    # a droplet's own std of ln D is small when its D came out high, so as a weight it would draw u upward
    spread = float(np.sqrt(np.median([fit.dof * fit.log_diffusion_std**2 for fit in fits]))) if fits else 0.0
    speeds = prior_std * np.linspace(-5, 5, AIR_POINTS)
    mean, std = 0.0, prior_std
    for _ in range(6):
        total = -0.5 * (speeds / prior_std) ** 2
        for fit in fits:
            total = total + _log_likelihood(fit, table, speeds, spread / np.sqrt(fit.dof))
        weights = np.exp(total - total.max())
        mean, std = moments(weights / weights.sum(), speeds)
        step = speeds[1] - speeds[0]
        if std > 2 * step:
            break
        speeds = mean + max(5 * std, 2 * step) * np.linspace(-1, 1, AIR_POINTS)
    return mean, std


def _log_likelihood(fit: FreeFit, table: Law, air_speeds: FloatArray, log_diffusion_std: float) -> FloatArray:
    """Log likelihood of air speeds from one droplet's fall speed and free diffusion, its radius integrated out.

    With ln D known to s_D and the speed w to s_w, the parameter orthogonal to the air speed has the density
    v' + (s_w / s_r)^2 / v' in ln r, where v' = dv/dln r and s_r = s_D / |dln D/dln r|.
    """
    if not np.isfinite(fit.fall_speed):
        return np.zeros_like(air_speeds)
    span = np.log(fit.diffusion) + SPAN * log_diffusion_std * np.array([1.0, -1.0])
    ends = np.interp(-span, -np.log(table.diffusion), table.log_radius)
    if not ends[1] > ends[0]:  # beyond all radii of the table
        return np.zeros_like(air_speeds)
    reach = np.interp(ends, table.log_radius, table.speed)
    points = int(np.clip((reach[1] - reach[0]) / (0.7 * fit.fall_speed_std), 60, 2000))
    log_radius = np.linspace(ends[0], ends[1], points)
    speed, log_diffusion = (
        np.interp(log_radius, table.log_radius, column) for column in (table.speed, np.log(table.diffusion))
    )
    slope = np.gradient(speed, log_radius)
    radius_std = log_diffusion_std / np.abs(np.gradient(log_diffusion, log_radius))
    prior = slope + (fit.fall_speed_std / radius_std) ** 2 / slope
    constant = np.log(prior) - 0.5 * ((np.log(fit.diffusion) - log_diffusion) / log_diffusion_std) ** 2
    misfit = (fit.fall_speed - air_speeds[:, None] - speed) / fit.fall_speed_std
    return np.asarray(logsumexp(constant - 0.5 * misfit**2, axis=1) - np.log(points))
