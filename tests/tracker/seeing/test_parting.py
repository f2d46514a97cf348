"""Droplets that meet: sightings that were one are parted where both tracks foretell them, and nowhere else."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from tracker.records import Flag, Recording, Sightings
from tracker.seeing.background import Background
from tracker.seeing.clocks import Clocks, clocks_of
from tracker.seeing.cutouts import Album, Cutouts
from tracker.seeing.fit import Camera
from tracker.seeing.learn import Eyes
from tracker.seeing.light import light_of
from tracker.seeing.parting import part_meetings

WIDTH, PEAK, NOISE = 1.7, np.array([90.0, 120.0]), 0.04
SIDE, FRAMES, CORNER = 96, 60, (7, 5)  # px; the region begins at the corner
MERGED = 3.2  # px: nearer ones are one sighting
LIGHT = 2 * np.pi * WIDTH**2
CAMERA = Camera(2.6, 0.25, 0.0, 255.0)


@dataclass(frozen=True)
class Meeting:
    """Two droplets that pass each other, and what was seen of them."""

    sightings: Sightings
    piece: np.ndarray
    clocks: Clocks
    cutouts: Cutouts
    place: np.ndarray  # (frames, 2 droplets, 2) px of the picture
    apart: np.ndarray  # (frames,) px

    def part(self) -> tuple[Sightings, np.ndarray]:
        """Part what was seen."""
        return part_meetings(self.sightings, self.piece, self.clocks, self.cutouts)


def eyes() -> Eyes:
    """A camera that has learned its still, even background."""
    level = np.full((SIDE, SIDE), 20, np.float32)
    background = Background(level, np.ones_like(level), 0.0, 64, 0.0)
    light = light_of(np.stack([level, level]).astype(np.uint8), level, 0.0)
    return Eyes(background, None, CAMERA, WIDTH, 5, CAMERA, light, {})  # type: ignore[arg-type]


def meet(seed: int, *, orphan: bool = False, shown: bool = True) -> Meeting:
    """Draw a meeting; sightings of both are an `orphan`'s or the first's, who is alone and bright where not `shown`."""
    rng = np.random.default_rng(seed)
    start, speed = np.array([[18, 47.0], [77, 48.0]]), np.array([[1, 0], [-1, 0.0]])
    steps = speed + rng.normal(0, 0.2, (FRAMES, 2, 2))
    place = start + np.cumsum(steps, axis=0)
    apart = np.hypot(*(place[:, 0] - place[:, 1]).T)
    at, view, album = np.arange(SIDE), eyes(), Album()
    pictures, rows = [], []
    for k in range(FRAMES):
        peak = PEAK if shown or apart[k] >= MERGED else np.array([PEAK.sum(), 0.0])
        spots = np.exp(-0.5 * ((at - place[k][:, :, None]) / WIDTH) ** 2)
        grey = 20 + np.einsum("n,ni,nj->ij", peak, spots[:, 1], spots[:, 0])
        noisy = rng.normal(grey, np.sqrt(2.6 - 1 / 12 + 0.25 * grey))
        pictures.append(np.clip(np.rint(noisy), 0, 254).astype(np.uint8))
        if apart[k] < MERGED:
            share = peak / peak.sum()
            rows.append((k, *(share @ place[k]), PEAK.sum() * LIGHT, int(Flag.MERGED), 2 if orphan else 0))
        else:
            rows += [(k, *place[k, j] + rng.normal(0, NOISE, 2), PEAK[j] * LIGHT, 0, j) for j in (0, 1)]
    frame, x, y, brightness, flags, piece = np.array(rows).T
    columns = {"frame": frame.astype(int), "x": x, "y": y, "flags": flags.astype(int)}
    columns["strain"] = np.zeros((len(x), 3))
    number = album.keep(view, pictures, np.arange(FRAMES), columns)
    std = np.full(len(x), NOISE)
    sightings = Sightings(
        frame, x + CORNER[0], y + CORNER[1], std, std, brightness, np.full(len(x), WIDTH), flags
    )
    recording = Recording(
        Path("drawn.avi"), "0" * 64, 200, 200, np.arange(FRAMES) / 25, np.empty(0, int), 0, False, 8, 255.0, "none"
    )  # fmt: skip
    clocks = clocks_of(recording, None)
    cutouts = album.cutouts(number, CORNER)
    return Meeting(sightings, piece.astype(int), clocks, cutouts, place + CORNER, apart)


@pytest.mark.parametrize("orphan", [False, True])
def test_missing_sightings_of_a_meeting_are_found_in_their_own_tracks(orphan):
    """Sightings from 1.5 to 3.2 px apart are all found, each in the track of its own droplet, flagged as crowded."""
    hidden = found = right = 0
    for seed in range(20):
        met = meet(seed, orphan=orphan)
        sightings, piece = met.part()
        close = np.flatnonzero((met.apart < MERGED) & (met.apart > 1.5))
        hidden += 2 * len(close)
        for j in (0, 1):
            rows = np.flatnonzero((piece == j) & np.isin(sightings.frame, close))
            new = rows[(sightings.flags[rows] & int(Flag.CROWDED)) != 0]
            at = np.column_stack([sightings.x[new], sightings.y[new]])
            off = np.hypot(*(at[:, None] - met.place[sightings.frame[new]]).transpose(2, 0, 1))
            found += len(new)
            right += np.count_nonzero(off[:, j] < off[:, 1 - j])
            assert len(np.unique(sightings.frame[piece == j])) == np.count_nonzero(piece == j)
        assert set(piece) <= set(met.piece)
    # 4 deviations of the foretold place and 20 of chi2 lose less than one in a hundred
    assert found >= 0.98 * hidden > 60
    assert right >= 0.98 * found


def test_places_of_parted_droplets_are_unbiased_and_as_doubtful_as_stated():
    """Errors of parted places have mean zero and the stated deviations, where one sighting for both was far off."""
    pulls, before = [], []
    for seed in range(20, 50):
        met = meet(seed)
        sightings, piece = met.part()
        use = (sightings.flags & int(Flag.CROWDED)) != 0
        use &= (met.apart[sightings.frame] > 1.5) & (piece < 2)
        at = np.column_stack([sightings.x, sightings.y])[use]
        std = np.column_stack([sightings.x_std, sightings.y_std])[use]
        pulls.append((at - met.place[sightings.frame[use], piece[use]]) / std)
        shared = np.flatnonzero((met.sightings.flags & int(Flag.MERGED)) != 0)
        way = met.sightings.x[shared] - met.place[met.sightings.frame[shared], 0, 0]
        before.append(way[met.apart[met.sightings.frame[shared]] > 1.5] / NOISE)
    p = np.concatenate(pulls)
    n = len(p)
    assert n > 100
    # four standard errors of a mean and of a spread of n normal values; the two of a pair lean on each other: half n
    assert np.abs(p.mean(0)).max() < 4 / np.sqrt(n / 2)
    assert np.abs(p.std(0) - 1).max() < 4 / np.sqrt(2 * n / 2)
    assert np.sqrt(np.mean(np.concatenate(before) ** 2)) > 10


@pytest.mark.parametrize("orphan", [False, True])
def test_a_bright_droplet_alone_is_never_parted(orphan):
    """One spot as bright as two stays one although a track is missing beside it."""
    for seed in range(20):
        met = meet(seed, orphan=orphan, shown=False)
        sightings, piece = met.part()
        assert len(sightings) == len(met.sightings)
        np.testing.assert_array_equal(sightings.x, met.sightings.x)
        np.testing.assert_array_equal(piece, met.piece)


def test_nothing_is_parted_without_cutouts():
    """Sightings without cut-outs come back as they were."""
    met = meet(0)
    empty = Cutouts(np.full(len(met.sightings), -1), (), (0, 0))
    assert part_meetings(met.sightings, met.piece, met.clocks, empty)[0] is met.sightings


def test_cutouts_hold_the_picture():
    """A window of a cut-out lies where the sighting does, background taken off, in px of the whole picture."""
    met = meet(3)
    row = np.flatnonzero(met.cutouts.number >= 0)[0]
    ((_, which, windows),) = met.cutouts.by_light(met.cutouts.number[[row]])
    assert which.tolist() == [0]
    light = windows.grey[0] * (windows.grey[0] > 20)  # above the noise of 2.8 grey
    centre = (light.sum(0) @ np.arange(len(light))) / light.sum() + windows.left[0]
    # the sum of some 4000 grey values of light with noise of 3 grey a pixel: a tenth of a pixel
    assert abs(centre - met.sightings.x[row]) < 0.3
    kept = met.cutouts.take(np.array([row]))
    assert kept.number.tolist() == [met.cutouts.number[row]]
