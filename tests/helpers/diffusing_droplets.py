"""Tracks of diffusing, falling, driven droplets as a camera sees them, by exact sampling.

The exposure average of a Brownian path is drawn from its exact joint law with the path's ends: given the ends, the
mean over an exposure tau is normal about their midpoint with variance 2 D tau / 12 (Brownian bridge). The field's
impulse is integrated here on its own, piece by piece, for a voltage that is constant within each segment.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from physics.droplet import ELEMENTARY_CHARGE, Conditions, diffusion, droplet_mobility, fall_speed
from physics.motion import Increments, increments

CONDITIONS = Conditions(
    temperature=295.15, viscosity=1.827e-5, mean_free_path=67.3e-9, air_density=1.19, oil_density=886.0,
    gravity=9.81, plate_gap=6e-3,
)  # fmt: skip
PIXEL = 2.5e-6  # m
PATTERN = (0, 1, 0, -1)  # field off, +, off, -


@dataclass(frozen=True)
class Plan:
    """How a droplet is recorded."""

    seconds: float = 24.0
    frame_rate: float = 30.0
    open_share: float = 0.9  # exposure over frame interval
    noise_px: float = 0.1
    missing: float = 0.05
    field: float = 4e4  # V/m
    pattern: tuple[int, ...] = PATTERN
    segment: float = 3.0  # s
    air_speed: float = 0.0  # m/s, downward
    side_speed: float = 0.0  # m/s
    diffusion_factor: float = 1.0  # on Stokes-Einstein
    noise_spread: float = 0.0  # sd of ln of the single sightings' noise

    @property
    def exposure(self) -> float:
        """In s."""
        return self.open_share / self.frame_rate


@dataclass(frozen=True)
class Track:
    """Sightings of one droplet."""

    times: NDArray[np.float64]  # s, starts of exposure
    down: NDArray[np.float64]  # m
    side: NDArray[np.float64]  # m
    std: NDArray[np.float64]  # m
    impulse: NDArray[np.float64]  # V s
    exposure: float  # s

    def steps(self, **options: object) -> Increments:
        """Increments of this track."""
        return increments(
            self.times, self.down, self.side, down_std=self.std, side_std=self.std, impulse=self.impulse,
            exposure=self.exposure, **options,
        )  # type: ignore[arg-type]  # fmt: skip


def mean_impulse(plan: Plan, times: NDArray[np.float64], gap: float) -> NDArray[np.float64]:
    """Exposure average of the integral of a stepped voltage, from ramps alone.

    A step of height h at t adds h times the exposure average of max(0, s - t), which is
    (max(0, end - t)^2 - max(0, start - t)^2) / (2 tau).
    """
    count = int(np.ceil(plan.seconds / plan.segment)) + 1
    volts = plan.field * gap * np.array([plan.pattern[i % len(plan.pattern)] for i in range(count)])
    impulse = np.zeros_like(times)
    for start, height in zip(plan.segment * np.arange(count), np.diff(volts, prepend=0.0), strict=True):
        late, early = (np.maximum(0.0, t - start) for t in (times + plan.exposure, times))
        impulse += height * (late**2 - early**2) / (2 * plan.exposure)
    return impulse


def record(
    rng: np.random.Generator,
    radius: float,
    number: float,
    *,
    plan: Plan = Plan(),
    conditions: Conditions = CONDITIONS,
) -> Track:
    """Record one droplet of a radius in m and a charge in elementary charges."""
    count = round(plan.seconds * plan.frame_rate)
    times = np.arange(count) / plan.frame_rate
    spread = 2 * plan.diffusion_factor * float(diffusion(radius, conditions))
    impulse = mean_impulse(plan, times, conditions.plate_gap)
    per_volt = float(droplet_mobility(radius, conditions)) * number * ELEMENTARY_CHARGE / conditions.plate_gap
    std = PIXEL * plan.noise_px * np.exp(plan.noise_spread * rng.standard_normal(count))
    down = (float(fall_speed(radius, conditions)) + plan.air_speed) * times + per_volt * impulse
    down = down + _path(rng, spread, plan, count) + std * rng.standard_normal(count)
    side = plan.side_speed * times + _path(rng, spread, plan, count) + std * rng.standard_normal(count)
    seen = rng.random(count) >= plan.missing
    return Track(times[seen], down[seen], side[seen], std[seen], impulse[seen], plan.exposure)


def _path(rng: np.random.Generator, spread: float, plan: Plan, count: int) -> NDArray[np.float64]:
    """Exposure averages of a Brownian path whose variance grows by `spread` a second."""
    within = np.sqrt(spread * plan.exposure) * rng.standard_normal(count)
    between = np.sqrt(spread * (1 / plan.frame_rate - plan.exposure)) * rng.standard_normal(count)
    start = np.concatenate([[0.0], np.cumsum(within + between)[:-1]])
    return start + within / 2 + np.sqrt(spread * plan.exposure / 12) * rng.standard_normal(count)


def stepped(
    rng: np.random.Generator, radius: float = 6e-7, before: float = 5, after: float = 6
) -> Increments:
    """Steps of a droplet that changes its charge at 12 s, where the field is off, numbered by charge part."""
    track = record(rng, radius, before)
    per_volt = float(droplet_mobility(radius, CONDITIONS)) * ELEMENTARY_CHARGE / CONDITIONS.plate_gap
    at = np.interp(12.0, track.times, track.impulse)
    change = np.where(track.times > 12.0, (after - before) * per_volt * (track.impulse - at), 0.0)
    track = replace(track, down=track.down + change)
    return track.steps(part=(track.times[1:] > 12.0).astype(int))
