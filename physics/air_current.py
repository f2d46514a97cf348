"""Vertical speed of the air that all droplets of a recording share, from their Brownian motion."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal

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
CAUCHY_POINTS = 161
CAUCHY_REACH = 60.0  # scales of a Cauchy prior that are looked at: 1 % of it lies beyond
LEAST_REACH = 6e-5  # m/s that are looked at in any case
BEND = 6.0  # of the sinh that spaces them: 3 % of the scale apart in the middle, 7 % of the speed outside
HALF_WIDTH = float(np.tan(np.pi / 2 * 0.6827))  # scales of a Cauchy density to either side that hold 68 %
SPAN = 5.0  # standard deviations of ln D that each droplet's radius may lie from its diffusion


def air_current(
    droplets: Sequence[Increments | FreeFit],
    conditions: Conditions,
    *,
    prior_std: float,
    tails: Literal["normal", "cauchy"] = "normal",
) -> tuple[float, float]:
    """Vertical speed of the air common to all droplets, from Brownian motion against fall speed.

    Parameters
    ----------
    droplets : sequence of Increments or FreeFit
        Steps, or their fit, each of one droplet; those with too few steps or without fall speed add nothing.
    conditions : Conditions
        Air, oil, gravity, slip model.
    prior_std : float
        Standard deviation of the air speed before looking, in m/s; above 0. Of a Cauchy prior its scale.
    tails : {"normal", "cauchy"}, optional
        Shape of the prior. Where its width is itself only one sample, such as the sideways speed of the same
        air, the prior is Cauchy: that of the ratio of two normal speeds of equal variance.

    Returns
    -------
    speed : float
        In m/s, downward; posterior mean.
    std : float
        In m/s; when the droplets tell nothing, `prior_std`, and of a Cauchy prior the half width that holds 68 %.

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
    fits = [
        each if isinstance(each, FreeFit) else free_fit(each)
        for each in droplets if isinstance(each, FreeFit) or len(each) >= MIN_INCREMENTS
    ]  # fmt: skip
    fits = [fit for fit in fits if np.isfinite(fit.fall_speed)]
    if not fits:
        return 0.0, prior_std * (HALF_WIDTH if tails == "cauchy" else 1.0)
    # a droplet's own std of ln D is small when its D came out high, so as a weight it would draw u upward
    spread = float(np.sqrt(np.median([fit.dof * fit.log_diffusion_std**2 for fit in fits])))
    speeds = _first_speeds(prior_std, tails)
    mean, std = 0.0, prior_std
    for _ in range(6):
        total = _log_prior(speeds / prior_std, tails)
        for fit in fits:
            total = total + _log_likelihood(fit, table, speeds, spread / np.sqrt(fit.dof))
        weights = np.exp(total - total.max()) * np.gradient(speeds)
        mean, std = moments(weights / weights.sum(), speeds)
        step = float(np.interp(mean, speeds, np.gradient(speeds)))
        if std > 2 * step:
            break
        speeds = mean + max(5 * std, 2 * step) * np.linspace(-1, 1, AIR_POINTS)
    return mean, std


def _first_speeds(width: float, tails: str) -> FloatArray:
    """Air speeds that are looked at first: even for a normal prior, dense in the middle of a Cauchy prior."""
    if tails == "normal":
        return width * np.linspace(-5, 5, AIR_POINTS)
    reach = max(CAUCHY_REACH * width, LEAST_REACH)
    return np.asarray(reach / np.sinh(BEND) * np.sinh(np.linspace(-BEND, BEND, CAUCHY_POINTS)))


def _log_prior(ratio: FloatArray, tails: str) -> FloatArray:
    """Log density of an air speed over the width of its prior, up to a constant."""
    return np.asarray(-0.5 * ratio**2 if tails == "normal" else -np.log1p(ratio**2))


def _log_likelihood(fit: FreeFit, table: Law, air_speeds: FloatArray, log_diffusion_std: float) -> FloatArray:
    """Log likelihood of air speeds from one droplet's fall speed and free diffusion, its radius integrated out.

    With ln D known to s_D and the speed w to s_w, the parameter orthogonal to the air speed has the density
    v' + (s_w / s_r)^2 / v' in ln r, where v' = dv/dln r and s_r = s_D / |dln D/dln r|.
    """
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
