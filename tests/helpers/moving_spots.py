"""Sightings of droplets that drift, diffuse and follow a field, with known owners; no pictures."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from tracker.records import Field, Recording, Seen, Segment, Sightings


@dataclass(frozen=True)
class Crowd:
    """What was drawn."""

    seen: Seen
    owner: np.ndarray  # (N,) droplet of each sighting; -1 for a false one
    place: np.ndarray  # (frames, droplets, 2) px
    field: Field


def switched_field(seconds: float, *, plateau: float = 2.0, volts: float = 200.0) -> Field:
    """Field off and on in turn."""
    starts = np.arange(0, seconds, plateau)
    segments = tuple(Segment(t, min(t + plateau, seconds), volts * (i % 2)) for i, t in enumerate(starts))
    times = np.repeat(np.append(starts, seconds), 2)[1:-1]
    values = np.repeat([s.voltage for s in segments], 2)
    return Field("list", segments, times, values, np.zeros(len(segments) - 1))


def draw(
    *, droplets: int, seconds: float, size: tuple[int, int], seed: int, rate: float = 25.0, diffusion: float = 5.0,
    noise: float = 0.05, missed: float = 0.01, false: float = 0.05, merge: float = 2.0,
) -> Crowd:  # fmt: skip
    """Draw a crowd: px and s throughout; droplets leave the picture and some come back.

    Of two droplets nearer than `merge` only the first is seen, as by a detector that cannot part them.
    """
    rng = np.random.default_rng(seed)
    count = int(seconds * rate)
    times = np.arange(count) / rate
    field = switched_field(seconds)
    on = np.array([field.segments[int(s)].voltage > 0 for s in field.segment_of(times + 0.25 / rate)])
    fall, drive = rng.uniform(5, 25, droplets), rng.uniform(-60, 60, droplets)
    speed = fall + np.where(on[:, None], drive, 0)
    step = rng.normal(0, np.sqrt(2 * diffusion / rate), (count, droplets, 2))
    step[..., 1] += speed / rate
    start = rng.uniform((0, -0.3 * size[1]), (size[0], 1.1 * size[1]), (droplets, 2))
    place = start + np.cumsum(step, axis=0)
    inside = ((place > 0) & (place < size)).all(-1)
    loge = rng.normal(7, 0.35, droplets)
    rows = []
    for k in range(count):
        apart = np.hypot(*(place[k][:, None] - place[k][None]).transpose(2, 0, 1))
        hidden = (np.triu(apart < merge, 1)).any(0)
        shown = ~hidden & inside[k] & (rng.random(droplets) > missed)
        for j in np.flatnonzero(shown):
            rows.append(
                (k, *(place[k, j] + rng.normal(0, noise, 2)), np.exp(loge[j] + rng.normal(0, 0.03)), j)
            )
        for _ in range(rng.poisson(false)):
            rows.append((k, *(rng.uniform(0, size)), np.exp(5.0), -1))
    table = np.array(rows)
    n = len(table)
    sightings = Sightings(
        table[:, 0].astype(int), table[:, 1], table[:, 2], np.full(n, noise), np.full(n, noise), table[:, 3],
        np.full(n, 1.7), np.zeros(n, int),
    )  # fmt: skip
    recording = Recording(
        Path("drawn.avi"), "0" * 64, size[0], size[1], times, np.empty(0, int), 0, False, 8, 255.0, "none"
    )
    return Crowd(Seen(recording, sightings), table[:, 4].astype(int), place, field)
