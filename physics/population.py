"""What the Brownian motion of many droplets together says of the scale and the air."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from physics.posterior import DropletPosterior

__all__ = ["PopulationRatio", "population_diffusion"]


@dataclass(frozen=True, slots=True)
class PopulationRatio:
    """Diffusion seen over that of the radii from the fall speeds, common to all droplets."""

    ratio: float  # 1 if scale, viscosity, densities and still air are right; NaN without droplets
    std: float  # standard uncertainty of the ratio from the droplets' own motion
    droplets: int  # that took part


def population_diffusion(posteriors: Sequence[DropletPosterior]) -> PopulationRatio:
    """Mean of the diffusion ratio over droplets, a check of the scale that needs no charge.

    Parameters
    ----------
    posteriors : sequence of DropletPosterior
        Those without a diffusion ratio do not count.

    Returns
    -------
    PopulationRatio
        Weighted geometric mean and its uncertainty.

    Notes
    -----
    The ratio goes as length^2.6 viscosity^1.6 density^-0.6: stated 1 % too large, a scale raises it by 2.6 %.
    A droplet whose D came out high states it with a smaller std, so weights take the std that is usual for the
    number of its steps; with its own, many droplets would add up a bias.
    """
    used = [(p, p.free) for p in posteriors if p.free is not None and np.isfinite(p.diffusion_ratio)]
    if not used:
        return PopulationRatio(float("nan"), float("nan"), 0)
    freedom = np.array([fit.dof for _, fit in used])
    usual = np.median(freedom * np.array([fit.log_diffusion_std**2 for _, fit in used]))
    weight = 1 / (usual / freedom + np.array([p.diffusion_speed_std**2 for p, _ in used]))
    log_mean = float(weight @ np.log([p.diffusion_ratio for p, _ in used]) / weight.sum())
    return PopulationRatio(
        float(np.exp(log_mean)), float(np.exp(log_mean) / np.sqrt(weight.sum())), len(used)
    )
