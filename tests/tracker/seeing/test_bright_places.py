"""Bright pixels and lamps are no droplets, and a droplet that is held at its place is no lamp."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tracker.records import Recording, Settings, Sightings
from tracker.seeing.fixed import on_fixed_places
from tracker.seeing.see import see
from tracker.simulate import Scene
from tracker.simulate.files import open_writer

FRAMES, RATE = 300, 25.0
WANDER = 0.3  # px, standard deviation of a droplet's diffusion from frame to frame along an axis


def sightings_of(places: list[np.ndarray], noise: float) -> tuple[Sightings, np.ndarray]:
    """Sightings of (2, FRAMES) places in every frame, ordered by frame, and the number of the place of each."""
    rng = np.random.default_rng(5)
    frame = np.repeat(np.arange(FRAMES), len(places))
    x, y = (np.stack([p[i] for p in places], 1).ravel() + rng.normal(0, noise, len(frame)) for i in range(2))
    n = len(frame)
    std = np.full(n, noise)
    found = Sightings(frame, x, y, std, std, np.full(n, 900.0), np.full(n, 1.7), np.zeros(n, np.int64))
    return found, np.tile(np.arange(len(places)), FRAMES)


def test_a_lamp_is_left_out_and_a_held_droplet_is_not():
    """Both stay within a few px; the droplet diffuses as the others do, the lamp's places scatter by noise alone."""
    rng = np.random.default_rng(6)
    wander = rng.normal(0, WANDER, (6, 2, FRAMES)).cumsum(2)
    drift = np.array([0.0, 1.0])[:, None] * np.arange(FRAMES)
    falling = [50 + 60 * i + drift + wander[i] for i in range(4)]
    held = [np.full((2, FRAMES), 500.0) + wander[4], np.full((2, FRAMES), 600.0) + wander[5]]
    lamp = np.full((2, FRAMES), 700.3)
    found, number = sightings_of([*falling, *held, lamp], noise=0.05)
    recording = Recording(
        Path("film.avi"), "", 1000, 1000, np.arange(FRAMES) / RATE, np.zeros(0, np.int64), 0, False, 8, 255.0, "mjpeg"
    )  # fmt: skip
    fixed = on_fixed_places(found, number, recording)
    assert fixed[number == 6].all()
    assert not fixed[number < 6].any()


@pytest.mark.parametrize(("codec", "ending"), [("mjpeg", "avi"), ("h264", "mp4"), ("ffv1", "mkv")])
def test_hot_pixels_make_no_sightings_and_held_droplets_do(tmp_path, codec, ending):
    """Ten pixels that stand 80 grey over the rest stay background; a droplet held for half the time does not."""
    rng = np.random.default_rng(1)
    height, width, count = 144, 192, 200
    y, x = np.mgrid[:height, :width]
    ground = 20 + 0.05 * x
    ground[rng.integers(8, height - 8, 10), rng.integers(8, width - 8, 10)] += 80
    wander = rng.normal(0, WANDER, (3, 2, count)).cumsum(2)
    start = np.array([[96.0, 70.0], [40.0, 10.0], [150.0, 20.0]])
    fall = np.maximum(np.arange(count) - count // 2, 0) * 0.6, np.arange(count) * 0.55, np.arange(count) * 0.5
    path = tmp_path / f"hot.{ending}"
    with open_writer(path, Scene(width=width, height=height, codec=codec), shown=path) as write:
        for i in range(count):
            light = ground.copy()
            for (a, b), w, f in zip(start, wander, fall, strict=True):
                light += 90 * np.exp(-((x - a - w[0, i]) ** 2 + (y - b - w[1, i] - f[i]) ** 2) / (2 * 1.7**2))
            noise = rng.normal(size=light.shape) * np.sqrt(0.25 * light + 2.5)
            write(np.clip(np.rint(light + noise), 0, 255).astype(np.uint8), i / RATE)
    s = see(path, settings=Settings()).sightings
    places = start[:, :, None] + wander + np.stack([np.zeros((3, count)), np.stack(fall)], 1)
    distance = np.hypot(s.x[:, None] - places[:, 0, s.frame].T, s.y[:, None] - places[:, 1, s.frame].T)
    false = np.count_nonzero(distance.min(1) > 4)
    assert false <= 0.05 * count + 4 * np.sqrt(
        0.05 * count
    )  # as asked, with four deviations of a Poisson count
    inside = places[:, 1] < height - 5
    for k in range(3):
        seen = np.unique(s.frame[distance[:, k] < 2])
        assert np.isin(np.flatnonzero(inside[k]), seen).mean() >= 0.98
