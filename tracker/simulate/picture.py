"""What the camera makes of the droplets: light, spots, reticle, noise and grey levels."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from tracker.records import FloatArray
from tracker.simulate.motion import Motion
from tracker.simulate.scene import Scene

_REACH = 6.0  # spots are drawn out to this many standard deviations beyond the picture's edge


@dataclass(frozen=True, slots=True)
class Looks:
    """How each droplet looks, and what stands still."""

    peak: FloatArray  # (J,) grey of a droplet in focus and at rest
    width: FloatArray  # (J,) px, standard deviation of the spot
    still: NDArray[np.float32]  # (height, width) grey of glare, bright lines and specks
    shade: NDArray[np.float32]  # (height, width) share of the light that dark lines let through
    stuck: FloatArray  # (S, 2) px, places of specks on the window


def draw_looks(scene: Scene, rng: np.random.Generator) -> Looks:
    """Draw brightness and focus of the droplets and build what stands still.

    Parameters
    ----------
    scene : Scene
        The camera.
    rng : numpy.random.Generator
        Source of chance.

    Returns
    -------
    looks : Looks
        Grey levels as of an 8-bit camera.

    Notes
    -----
    Out of focus a spot keeps its light: its peak falls with the square of its width.
    """
    width = np.hypot(scene.spot, scene.defocus * rng.standard_normal(scene.droplets))
    bright = np.exp(scene.peak_spread * rng.standard_normal(scene.droplets))
    stuck = rng.uniform(0, [scene.width - 1, scene.height - 1], (scene.stuck, 2))
    across = np.linspace(0, scene.gradient, scene.width, dtype=np.float32)
    still = np.tile(scene.background + across, (scene.height, 1)).astype(np.float32)
    still = still + _spots(
        scene, stuck, np.full(len(stuck), scene.spot), np.full(len(stuck), float(scene.peak))
    )
    lines = np.maximum(
        _ruled(scene.height, scene.lines)[:, None], _ruled(scene.width, scene.columns)[None, :]
    )
    shade = 1 - max(scene.line_depth, 0.0) * lines
    glow = max(-scene.line_depth, 0.0) * scene.peak * lines
    still = np.asarray(still + glow, dtype=np.float32)
    return Looks(
        scene.peak * bright * (scene.spot / width) ** 2, width, still, shade.astype(np.float32), stuck
    )


def _ruled(length: int, count: int) -> NDArray[np.float32]:
    """Profile across evenly spaced lines 1 px in standard deviation: 1 on a line, 0 between."""
    at = (np.arange(count) + 0.5) * length / max(count, 1)
    profile = np.exp(-((np.arange(length)[:, None] - at) ** 2) / 2).max(axis=1, initial=0)
    return np.asarray(profile, dtype=np.float32)


def _spots(scene: Scene, place: FloatArray, width: FloatArray, peak: FloatArray) -> NDArray[np.float32]:
    """Sum of round Gaussian spots, each pixel the integral over its area."""
    profiles = []
    for axis, length in ((1, scene.height), (0, scene.width)):
        edges = ndtr((np.arange(length + 1) - 0.5 - place[:, axis, None]) / width[:, None])
        profiles.append((np.diff(edges) * np.sqrt(2 * np.pi) * width[:, None]).astype(np.float32))
    return np.asarray((profiles[0] * peak[:, None].astype(np.float32)).T @ profiles[1], dtype=np.float32)


def _droplet_light(scene: Scene, looks: Looks, motion: Motion, frame: int) -> NDArray[np.float32]:
    """Light of the droplets in one frame; moving ones are drawn out along their way, mean place kept."""
    x, y = motion.x_px[frame], motion.y_px[frame]
    edge = _REACH * looks.width + np.hypot(motion.smear_x_px[frame], motion.smear_y_px[frame])
    seen = (x > -edge) & (x < scene.width + edge) & (y > -edge) & (y < scene.height + edge)
    smear = np.stack([motion.smear_x_px[frame][seen], motion.smear_y_px[frame][seen]], axis=1)
    parts = max(1, int(np.ceil(np.hypot(*smear.T).max(initial=0) / scene.spot * 2)))
    along = (np.arange(parts) + 0.5) / parts - 0.5
    place = np.stack([x[seen], y[seen]], axis=1) + along[:, None, None] * smear
    return _spots(
        scene,
        place.reshape(-1, 2),
        np.tile(looks.width[seen], parts),
        np.tile(looks.peak[seen], parts) / parts,
    )


def pictures(scene: Scene, looks: Looks, motion: Motion, rng: np.random.Generator) -> Iterator[NDArray[Any]]:
    """Take the picture of every frame in turn.

    Parameters
    ----------
    scene : Scene
        The camera.
    looks : Looks
        Brightness of the droplets and what stands still.
    motion : Motion
        Where the droplets are.
    rng : numpy.random.Generator
        Source of chance.

    Yields
    ------
    picture : ndarray of shape (height, width)
        uint8, or uint16 for more than 8 bits.

    Notes
    -----
    Variance of a grey value: gain x mean + read_noise^2, normal; the mean is background, droplets and lamp.
    """
    deeper, full = 2.0 ** (scene.bits - 8), 2**scene.bits - 1
    kind = np.uint8 if scene.bits == 8 else np.uint16
    for frame in range(len(motion.starts)):
        mean = (looks.still + _droplet_light(scene, looks, motion, frame)) * looks.shade
        mean *= np.float32(1 + scene.flicker * rng.standard_normal())
        if scene.lamp is not None:
            left, top, wide, high = scene.lamp
            mean[top : top + high, left : left + wide] += np.float32(150 * motion.lit[frame])
        np.maximum(mean, 0, out=mean)
        noise = rng.standard_normal(mean.shape, dtype=np.float32)
        noise *= np.sqrt(np.float32(scene.gain) * mean + np.float32(scene.read_noise**2))
        yield np.clip(np.rint((mean + noise) * np.float32(deeper)), 0, full).astype(kind)
