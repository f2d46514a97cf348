"""Jumps of all droplets at once, told from what a few diffusing droplets do by chance."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.records import Sightings
from tracker.seeing.light import common_jumps

FRAMES, RATE = 144, 12.0


def diffusing(rng: np.random.Generator, droplets: int, *, step: float, jump: float = 0.0) -> Sightings:
    """Droplets with Brownian steps of a standard deviation, all of them moved at frame 70."""
    walks = rng.normal(0, step, (droplets, FRAMES, 2)).cumsum(1) + rng.uniform(20, 140, (droplets, 1, 2))
    walks[:, 70:, 1] += jump
    frame = np.tile(np.arange(FRAMES), droplets)
    order = np.argsort(frame, kind="stable")
    x, y = (walks[:, :, i].ravel()[order] for i in range(2))
    same = np.ones(len(frame))
    return Sightings(frame[order], x, y, 0.05 * same, 0.05 * same, 900 * same, 1.5 * same, 0 * frame)


def pieces(sightings: Sightings, droplets: int) -> np.ndarray:
    """Number of each sighting's droplet: within a frame they stand in order."""
    return np.tile(np.arange(droplets), len(sightings) // droplets)


@pytest.mark.parametrize("droplets", [4, 5, 7])
def test_brownian_motion_of_few_droplets_is_no_jump(droplets):
    """In 100 recordings of a few small droplets at 12 Hz, steps 0.4 px, none is said to jump."""
    rng = np.random.default_rng(droplets)
    times = np.arange(FRAMES) / RATE
    for _ in range(100):
        sightings = diffusing(rng, droplets, step=0.4)
        assert common_jumps(sightings, pieces(sightings, droplets), times) == []


@pytest.mark.parametrize("droplets", [4, 12])
def test_common_jump_is_found(droplets):
    """A jump of 5 px, six standard deviations of the median's second difference and more, is found at its frame."""
    rng = np.random.default_rng(droplets)
    times = np.arange(FRAMES) / RATE
    for _ in range(20):
        sightings = diffusing(rng, droplets, step=0.3, jump=5.0)
        assert common_jumps(sightings, pieces(sightings, droplets), times) == [70]
