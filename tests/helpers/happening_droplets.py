"""Tracks of droplets to which something happens, and trials of the tests that must find it.

A droplet's speed is piecewise constant, so the exposure average of its mean place is a sum of exact ramps; Brownian
motion is drawn from its exact joint law, as in `diffusing_droplets`. Nothing of ours is used for the motion but the
closed forms of speed, mobility and diffusion.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path as FilePath

import numpy as np
from diffusing_droplets import CONDITIONS, PIXEL
from numpy.typing import NDArray

from physics.droplet import ELEMENTARY_CHARGE, Conditions, diffusion, droplet_mobility, fall_speed
from physics.motion import field_impulse
from tracker.bench import Bench, load_bench
from tracker.motion.velocity import Path
from tracker.records import Recording, Sightings, Tracks

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Life:
    """What one droplet is and what happens to it; times in s, radii in m."""

    radius: float
    number: float
    changes: tuple[tuple[float, float, float], ...] = ()  # (time, new radius, new number)
    shrinking: float = 0.0  # d ln r / dt in 1/s
    diffusion_factor: float = 1.0
    begin: float = 0.0
    end: float = float("inf")


@dataclass(frozen=True)
class Camera:
    """How droplets are recorded, and the field."""

    seconds: float = 24.0
    frame_rate: float = 30.0
    open_share: float = 0.9
    noise_px: float = 0.1
    missing: float = 0.05
    steps: tuple[tuple[float, float], ...] = field(default=())  # (time in s, field in V/m, downward positive)

    @property
    def exposure(self) -> float:
        return self.open_share / self.frame_rate

    @property
    def times(self) -> Floats:
        return np.arange(round(self.seconds * self.frame_rate)) / self.frame_rate


def schedule(strength: float, *, seconds: float = 24.0, plateau: float = 3.0, signs: tuple[int, ...] = (0, 1, 0, -1),
             jitter: np.random.Generator | None = None) -> tuple[tuple[float, float], ...]:  # fmt: skip
    """Field off, on, off, reversed in turn, each for a plateau; jittered toggles by up to a fifth of one."""
    count = int(np.ceil(seconds / plateau))
    times = plateau * np.arange(count)
    if jitter is not None:
        times[1:] += plateau * jitter.uniform(-0.2, 0.2, count - 1)
    return tuple((float(t), strength * signs[i % len(signs)]) for i, t in enumerate(times))


def ramp(times: Floats, exposure: float, start: float) -> Floats:
    """Exposure average of max(0, t - start)."""
    late, early = np.maximum(0.0, times + exposure - start), np.maximum(0.0, times - start)
    return (late**2 - early**2) / (2 * exposure)


def brownian(rng: np.random.Generator, spread: float, camera: Camera) -> Floats:
    """Exposure averages of a Brownian path whose variance grows by `spread` a second."""
    count, tau, dt = len(camera.times), camera.exposure, 1 / camera.frame_rate
    within = np.sqrt(spread * tau) * rng.standard_normal(count)
    between = np.sqrt(spread * (dt - tau)) * rng.standard_normal(count)
    start = np.concatenate([[0.0], np.cumsum(within + between)[:-1]])
    return start + within / 2 + np.sqrt(spread * tau / 12) * rng.standard_normal(count)


def mean_place(life: Life, camera: Camera, conditions: Conditions) -> Floats:
    """Exposure averages of the place without Brownian motion."""
    edges = {0.0, *(t for t, _ in camera.steps), *(t for t, _, _ in life.changes)}
    if life.shrinking:
        edges |= set(np.arange(0.0, camera.seconds, 0.05).tolist())
    when = np.array(sorted(edges))
    field_times = np.array([t for t, _ in camera.steps] or [0.0])
    field_values = np.array([e for _, e in camera.steps] or [0.0])
    strength = field_values[np.clip(np.searchsorted(field_times, when, side="right") - 1, 0, None)]
    radius, number = np.full(len(when), life.radius), np.full(len(when), life.number)
    for time, new_radius, new_number in life.changes:
        radius[when >= time], number[when >= time] = new_radius, new_number
    radius = radius * np.exp(life.shrinking * (when + (0.025 if life.shrinking else 0.0)))
    speed = (
        fall_speed(radius, conditions)
        + droplet_mobility(radius, conditions) * number * ELEMENTARY_CHARGE * strength
    )
    place = np.zeros(len(camera.times))
    for start, height in zip(when, np.diff(speed, prepend=0.0), strict=True):
        place += height * ramp(camera.times, camera.exposure, start)
    return place


def record_path(
    rng: np.random.Generator,
    life: Life,
    camera: Camera,
    *,
    conditions: Conditions = CONDITIONS,
    number: int = 0,
) -> Path:
    """Record one droplet as a path along and across gravity."""
    times, std = camera.times, PIXEL * camera.noise_px
    spread = 2 * life.diffusion_factor * float(diffusion(life.radius, conditions))
    noise = std * rng.standard_normal((2, len(times)))
    down = mean_place(life, camera, conditions) + brownian(rng, spread, camera) + noise[0]
    side = brownian(rng, spread, camera) + noise[1]
    seen = (rng.random(len(times)) >= camera.missing) & (times >= life.begin) & (times < life.end)
    knots, volts = knots_of(camera, conditions)
    impulse = field_impulse(knots, volts, times[seen], camera.exposure)
    frames = np.flatnonzero(seen)
    full = np.full(len(frames), std)
    return Path(number, frames, times[seen], down[seen], side[seen], full, full, impulse,
                camera.exposure, np.zeros(len(frames) - 1, bool))  # fmt: skip


def knots_of(camera: Camera, conditions: Conditions = CONDITIONS) -> tuple[Floats, Floats]:
    """Voltage knots of the camera's field."""
    times = np.array([t for t, _ in camera.steps] or [0.0])
    volts = np.array([e for _, e in camera.steps] or [0.0]) * conditions.plate_gap
    return np.repeat(times, 2)[1:], np.repeat(volts, 2)[:-1]


def evaporated(life: Life, share: float, seconds: float) -> Life:
    """Let a droplet lose a share of its radius over a time, with its radius at mid time."""
    rate = float(np.log1p(-share)) / seconds
    return replace(life, radius=life.radius * float(np.exp(-rate * seconds / 2)), shrinking=rate)


def made_tracks(
    rng: np.random.Generator, lives: list[Life], camera: Camera, *, conditions: Conditions = CONDITIONS,
    pixel: float = 3e-6, tilt_deg: float = 0.0, air: tuple[float, float] = (0.0, 0.0),
    gust: tuple[float, float] = (0.0, 0.0), noise_px: float = 0.05,
) -> tuple[Tracks, Recording]:  # fmt: skip
    """Tracks of several droplets in one recording, in px; `air` and `gust` are (down, side) in m/s.

    The gust is a speed that swings as sin(2 pi t / 20 s) and carries all droplets alike.
    """
    times, angle = camera.times, np.deg2rad(tilt_deg)
    swing = 20.0 / (2 * np.pi) * (1 - np.cos(2 * np.pi * (times + camera.exposure / 2) / 20.0))
    numbers, frames, xs, ys = [], [], [], []
    quiet = replace(camera, noise_px=0.0)
    for number, life in enumerate(lives):
        spread = 2 * life.diffusion_factor * float(diffusion(life.radius, conditions))
        down = (
            mean_place(life, quiet, conditions)
            + brownian(rng, spread, quiet)
            + air[0] * times
            + gust[0] * swing
        )
        side = brownian(rng, spread, quiet) + air[1] * times + gust[1] * swing
        seen = (rng.random(len(times)) >= camera.missing) & (times >= life.begin) & (times < life.end)
        x, y = side * np.cos(angle) + down * np.sin(angle), down * np.cos(angle) - side * np.sin(angle)
        numbers.append(np.full(int(seen.sum()), number))
        frames.append(np.flatnonzero(seen))
        xs.append(40.0 * number + 20.0 + x[seen] / pixel + noise_px * rng.standard_normal(int(seen.sum())))
        ys.append(200.0 + y[seen] / pixel + noise_px * rng.standard_normal(int(seen.sum())))
    count = sum(len(f) for f in frames)
    sightings = Sightings(np.concatenate(frames), np.concatenate(xs), np.concatenate(ys), np.full(count, noise_px),
                          np.full(count, noise_px), np.full(count, 900.0), np.full(count, 1.7),
                          np.zeros(count, np.int64))  # fmt: skip
    recording = Recording(FilePath("clip.avi"), "0" * 64, 640, 480, times, np.empty(0, np.int64), 0, False, 8, 255.0,
                          "ffv1")  # fmt: skip
    return Tracks(np.concatenate(numbers), sightings), recording


def made_bench(
    folder: FilePath, camera: Camera, *, source: str = "list", voltage: float = 240.0, **keys: str
) -> Bench:
    """Load a bench with the values of `CONDITIONS`, the camera's field as its list, and more keys of [camera]."""
    entries = ", ".join(f'["{t!r} s", "{e * CONDITIONS.plate_gap!r} V"]' for t, e in camera.steps)
    more = "\n".join(f'{key} = "{value}"' for key, value in keys.items())
    text = f"""
[cell]
plate_gap = "6.000(6) mm"
voltage = "{voltage}(2) V"
[oil]
density = "886(1) kg/m^3"
[air]
temperature = "22.0(1) degC"
pressure = "1008(1) hPa"
[site]
gravity = "9.81 m/s^2"
[camera]
metres_per_pixel = "3.000(3) um"
exposure = "{camera.exposure * 1e3!r} ms"
{more}
[field]
source = "{source}"
list = [{entries}]
"""
    (folder / "bench.toml").write_text(text, encoding="utf-8")
    return load_bench(folder / "bench.toml")
