"""Droplets that were seen as one while they met: fitted jointly from where their tracks foretell them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.records import Flag, FloatArray, IntArray, Sightings
from tracker.seeing.clocks import Clocks
from tracker.seeing.crowd import Pairs, fit_pairs, without_others
from tracker.seeing.cutouts import Cutouts
from tracker.seeing.fit import Spots, Windows, fit_spots
from tracker.seeing.learn import Eyes
from tracker.seeing.stitch import Motion, describe

_LASTING = 15  # sightings of a track that foretells
_LONGEST = 60  # frames of a gap
_NEAR = 6.0  # px: further apart, two are seen as two
_VAGUE = 2.0  # px: a place foretold no better starts no fit
_OFF = 1.5  # px, from the place foretold, beside 4 standard deviations
_SIGMAS = 4.0
_FACTOR = 2.0  # of the usual amplitude, either way
_PROOF = 20.0  # fall of chi2 in units of the noise: three more values take 16 by chance once in a thousand
_MISFIT = 1.5  # chi2 of two spots over the pixels, in units of the noise: more is a third droplet
_MOST_STD = 0.4  # widths, of a place
_ROUNDS = 2  # a gap that became shorter foretells better


@dataclass(frozen=True, slots=True)
class Ways:
    """Lasting tracks in order, and what foretells places in their gaps."""

    rows: IntArray  # (n,) of the sightings, ordered by track, then frame
    track: IntArray  # (n,)
    velocity: FloatArray  # (tracks, states, 2) px/s
    light: FloatArray  # (tracks,) usual brightness
    motion: Motion


@dataclass(frozen=True, slots=True)
class Foretold:
    """Places between two sightings of a track."""

    at: FloatArray  # (M, 2) px
    std: FloatArray  # (M,) px, along each axis

    def take(self, rows: NDArray[np.int64] | NDArray[np.bool_]) -> Foretold:
        """Give the chosen places."""
        return Foretold(self.at[rows], self.std[rows])


@dataclass(frozen=True, slots=True)
class Meetings:
    """Sightings that two tracks share: `one` has it or nobody does, `other` is missing."""

    frame: IntArray  # (M,)
    host: IntArray  # (M,) rows of the sightings
    tracks: IntArray  # (M, 2) one and other
    one: Foretold
    other: Foretold

    def take(self, rows: NDArray[np.int64] | NDArray[np.bool_]) -> Meetings:
        """Give the chosen meetings."""
        return Meetings(
            self.frame[rows], self.host[rows], self.tracks[rows], self.one.take(rows), self.other.take(rows)
        )


def part_meetings(
    sightings: Sightings, piece: IntArray, clocks: Clocks, cutouts: Cutouts
) -> tuple[Sightings, IntArray]:
    """Add sightings of droplets that were hidden in another's, and mend the place of the other.

    Parameters
    ----------
    sightings : Sightings
        Ordered by frame.
    piece : ndarray of shape (N,)
        Track of each sighting.
    clocks : Clocks
        Times at each voltage.
    cutouts : Cutouts
        Of some of the sightings.

    Returns
    -------
    sightings : Sightings
        The same rows, those of parted pairs mended, and the added ones after them.
    piece : ndarray
        Their tracks; none is new.

    Notes
    -----
    Both sightings of a pair are flagged CROWDED. Their deviations come from the joint fit, scaled as those of the
    other sightings are. A pair is parted where two spots explain the picture better than one does, with
    the amplitudes that both tracks usually have and at the places foretold by both.
    """
    if not cutouts.sheets:
        return sightings, piece
    for find in _ROUNDS * (orphans_between, hosts_beside):
        ways = ways_of(sightings, piece, clocks)
        meetings = find(sightings, ways, clocks, cutouts)
        if len(meetings.frame) == 0:
            continue
        parts = [
            _part(sightings, piece, ways, meetings.take(which), (eyes, windows))
            for eyes, which, windows in cutouts.by_light(cutouts.number[meetings.host])
        ]
        host, tracks, *values = (np.concatenate(c) for c in zip(*parts, strict=True))
        sightings = _mended(sightings, host, *values)
        piece = np.concatenate([piece, tracks[:, 1]])
        piece[host] = tracks[:, 0]
        piece = np.unique(piece, return_inverse=True)[1]  # what was short may be gone
        cutouts = replace(cutouts, number=np.concatenate([cutouts.number, np.full(len(host), -1)]))
    return sightings, piece


def ways_of(sightings: Sightings, piece: IntArray, clocks: Clocks) -> Ways:
    """Put lasting tracks in order and learn their velocities and brightness."""
    pieces, motion = describe(sightings, piece, clocks)
    rows = np.lexsort((sightings.frame, piece))
    rows = rows[np.bincount(piece)[piece[rows]] >= _LASTING]
    time = pieces.duration[0] + pieces.duration[1]
    sums = sum(v * t[..., None] for v, t in zip(pieces.velocity, pieces.duration, strict=True))
    mean = sums / np.maximum(time, 1e-12)[..., None]
    velocity = np.where(time[..., None] > 0, mean, motion.mean)
    order = np.lexsort((sightings.brightness, piece))
    count = np.bincount(piece)
    light = sightings.brightness[order[np.cumsum(count) - count + count // 2]]
    return Ways(rows, piece[rows], velocity, light, motion)


def _gaps(sightings: Sightings, ways: Ways, clocks: Clocks) -> tuple[IntArray, IntArray, Foretold]:
    """Frames in which lasting tracks are missing: track, frame, and the place foretold."""
    step = np.diff(sightings.frame[ways.rows])
    begin = np.flatnonzero((np.diff(ways.track) == 0) & (step > 1) & (step <= _LONGEST))
    many = step[begin] - 1
    left = np.repeat(begin, many)
    missing = (
        sightings.frame[ways.rows[left]] + 1 + np.arange(len(left)) - np.repeat(np.cumsum(many) - many, many)
    )
    foretold = foretell(sightings, ways, clocks, (left, left + 1, missing))
    sharp = np.flatnonzero(foretold.std < _VAGUE)
    return ways.track[left[sharp]], missing[sharp], foretold.take(sharp)


def _nearest(
    sightings: Sightings, rows: IntArray, foretold: Foretold, frame: IntArray
) -> tuple[IntArray, IntArray]:
    """Places foretold with one of the given sightings near, nearest first, and the position of that sighting."""
    from scipy.spatial import cKDTree

    if len(rows) == 0 or len(frame) == 0:
        return np.empty(0, np.int64), np.empty(0, np.int64)
    plane = 10 * _NEAR
    tree = cKDTree(np.column_stack([sightings.x, sightings.y, plane * sightings.frame])[rows])
    distance, near = tree.query(np.column_stack([foretold.at, plane * frame]), distance_upper_bound=_NEAR)
    chosen = np.argsort(distance, kind="stable")[: np.count_nonzero(np.isfinite(distance))]
    return chosen, near[chosen]


def hosts_beside(sightings: Sightings, ways: Ways, clocks: Clocks, cutouts: Cutouts) -> Meetings:
    """Find sightings of a lasting track beside which another lasting track is missing."""
    track, frame, foretold = _gaps(sightings, ways, clocks)
    position = np.flatnonzero(cutouts.number[ways.rows] >= 0)
    chosen, near = _nearest(sightings, ways.rows[position], foretold, frame)
    first = np.unique(near, return_index=True)[1]  # a sighting is shared with the nearest
    chosen, host = chosen[first], position[near[first]]
    seen = foretell(sightings, ways, clocks, (*_around(ways, host), frame[chosen]))
    tracks = np.column_stack([ways.track[host], track[chosen]])
    found = Meetings(frame[chosen], ways.rows[host], tracks, seen, foretold.take(chosen))
    return found.take(seen.std < _VAGUE)


def orphans_between(sightings: Sightings, ways: Ways, clocks: Clocks, cutouts: Cutouts) -> Meetings:
    """Find sightings of no lasting track beside which two lasting tracks are missing."""
    track, frame, foretold = _gaps(sightings, ways, clocks)
    lone = cutouts.number >= 0
    lone[ways.rows] = False
    rows = np.flatnonzero(lone)
    chosen, near = _nearest(sightings, rows, foretold, frame)
    order = np.argsort(near, kind="stable")  # still nearest first for each
    chosen, near = chosen[order], near[order]
    first = np.unique(near, return_index=True)[1]
    first = first[np.append(near, -1)[first + 1] == near[first]]
    one, other = chosen[first], chosen[first + 1]
    tracks = np.column_stack([track[one], track[other]])
    return Meetings(frame[one], rows[near[first]], tracks, foretold.take(one), foretold.take(other))


def _around(ways: Ways, host: IntArray) -> tuple[IntArray, IntArray]:
    """Positions in the order of the nearest rows before and after that share their sighting with none; -1 for none."""
    n = len(ways.rows)
    shared = np.zeros(n, np.bool_)
    shared[host] = True
    before = np.maximum.accumulate(np.where(shared, -1, np.arange(n)))[host]
    after = np.minimum.accumulate(np.where(shared, n, np.arange(n))[::-1])[::-1][host]
    before = np.where((before >= 0) & (ways.track[before] == ways.track[host]), before, -1)
    after = np.where(after < n, after, 0)
    return before, np.where(ways.track[after] == ways.track[host], after, -1)


def foretell(
    sightings: Sightings, ways: Ways, clocks: Clocks, where: tuple[IntArray, IntArray, IntArray]
) -> Foretold:
    """Places between two sightings of one track: the way at its velocities, drawn to meet both; Brownian between."""
    before, after, frame = where
    a, b = ways.rows[before], ways.rows[after]
    place = np.column_stack([sightings.x, sightings.y])
    speed = ways.velocity[ways.track[before]]
    first, last = sightings.frame[a], sightings.frame[b]
    spent = clocks.elapsed[frame] - clocks.elapsed[first]
    whole = clocks.elapsed[last] - clocks.elapsed[first]
    share = (spent.sum(1) / np.maximum(whole.sum(1), 1e-12))[:, None]
    way = place[b] - place[a] - (whole[..., None] * speed).sum(1)
    at = place[a] + (spent[..., None] * speed).sum(1) + share * way
    share = share[:, 0]
    variance = 2 * ways.motion.diffusion * whole.sum(1) * share * (1 - share) + ways.motion.noise
    return Foretold(at, np.where((before >= 0) & (after >= 0), np.sqrt(variance), np.inf))


def _part(
    sightings: Sightings, piece: IntArray, ways: Ways, meetings: Meetings, view: tuple[Eyes, Windows]
) -> tuple[IntArray, IntArray, FloatArray, FloatArray, FloatArray]:
    """Sightings that were parted, both tracks, places (K, axes, 2), their deviations, and brightness (K, 2)."""
    eyes, windows = view
    area = 2 * np.pi * eyes.width**2
    usual = ways.light[meetings.tracks] / area
    windows = _cleared(sightings, piece, meetings, windows, eyes.width)
    middle = (usual[:, :1] * meetings.one.at + usual[:, 1:] * meetings.other.at) / usual.sum(1)[:, None]
    start = np.full(len(middle), eyes.width)
    one = fit_spots(windows, (middle[:, 0], middle[:, 1]), camera=eyes.camera, width=(start, start), rounds=4)
    shift = np.column_stack([one.x, one.y]) - middle
    shift[np.hypot(*shift.T) > _NEAR] = 0  # the middle of their light is known better than either place
    guess = np.column_stack([usual[:, 0], meetings.one.at + shift, usual[:, 1], meetings.other.at + shift])
    two = fit_pairs(windows, guess, camera=eyes.camera, width=eyes.width, rounds=10)
    scale = _scale(sightings, meetings.host, one)
    fine = _as_foretold(two, meetings, usual, scale, eyes.width)
    fine &= one.chi2 - two.chi2 > _PROOF * scale**2
    fine &= two.chi2 < _MISFIT * (~windows.bad).sum((1, 2)) * scale**2
    rows = np.flatnonzero(fine)
    two, scale = two.take(rows), scale[rows]
    places = two.values[:, [1, 4, 2, 5]].reshape(-1, 2, 2)
    stds = scale[:, None] * np.sqrt(two.covariance[:, [1, 4, 2, 5], [1, 4, 2, 5]])
    return (
        meetings.host[rows], meetings.tracks[rows], places, stds.reshape(-1, 2, 2), two.values[:, [0, 3]] * area
    )  # fmt: skip


def _cleared(
    sightings: Sightings, piece: IntArray, meetings: Meetings, windows: Windows, width: float
) -> Windows:
    """Windows without the light of third droplets."""
    lasting = (np.bincount(piece)[piece] >= _LASTING) & np.isin(sightings.frame, meetings.frame)
    lasting[meetings.host] = True
    others = np.flatnonzero(lasting)
    own = np.searchsorted(others, meetings.host)
    n = len(others)
    table = {
        "frame": np.concatenate([sightings.frame[others], meetings.frame]),
        "x": np.concatenate([sightings.x[others], meetings.other.at[:, 0]]),
        "y": np.concatenate([sightings.y[others], meetings.other.at[:, 1]]),
        "amplitude": np.concatenate(
            [sightings.brightness[others] / (2 * np.pi * width**2), np.zeros(len(meetings.frame))]
        ),
    }
    return without_others(windows, table, np.column_stack([own, n + np.arange(len(own))]), width)


def _scale(sightings: Sightings, host: IntArray, one: Spots) -> FloatArray:
    """Stated deviations over those of single fits under the camera's noise: what noise and codec add."""
    own = np.sqrt(np.maximum(one.covariance[:, 1, 1], 1e-12))
    ratio = np.where(one.good, sightings.x_std[host] / own, np.nan)
    single = (sightings.flags[host] & int(Flag.CROWDED | Flag.MERGED)) == 0
    usual = float(np.nanmedian(ratio[single & one.good])) if (single & one.good).any() else 1.0
    return np.maximum(np.where(single & one.good, ratio, usual), 1.0)


def _as_foretold(
    two: Pairs, meetings: Meetings, usual: FloatArray, scale: FloatArray, width: float
) -> NDArray[np.bool_]:
    """Whether both spots have the amplitudes and lie at the places that are foretold, and are told apart."""
    fine = (np.abs(np.log(two.values[:, [0, 3]] / usual)) < np.log(_FACTOR)).all(1)
    for told, first in ((meetings.one, 1), (meetings.other, 4)):
        off = np.hypot(*(two.values[:, first : first + 2] - told.at).T)
        fine &= off < _OFF + _SIGMAS * told.std
    doubt = two.covariance[:, [1, 2, 4, 5], [1, 2, 4, 5]]
    return np.asarray(fine & ((doubt > 0) & (doubt * scale[:, None] ** 2 < (_MOST_STD * width) ** 2)).all(1))


def _mended(
    sightings: Sightings, host: IntArray, places: FloatArray, stds: FloatArray, brightness: FloatArray
) -> Sightings:
    """Sightings with the hosts' places replaced and their partners' added at the end."""
    columns = {n: getattr(sightings, n).copy() for n in ("x", "y", "x_std", "y_std", "brightness", "flags")}
    values = {
        "x": places[:, 0],
        "y": places[:, 1],
        "x_std": stds[:, 0],
        "y_std": stds[:, 1],
        "brightness": brightness,
    }
    for name, both in values.items():
        columns[name][host] = both[:, 0]
        columns[name] = np.concatenate([columns[name], both[:, 1]])
    kept = int(Flag.EDGE | Flag.LINE | Flag.SATURATED)
    columns["flags"][host] = (columns["flags"][host] & kept) | int(Flag.CROWDED)
    columns["flags"] = np.concatenate([columns["flags"], columns["flags"][host]])
    more = {
        n: np.concatenate([getattr(sightings, n), getattr(sightings, n)[host]]) for n in ("frame", "width")
    }
    return replace(sightings, **columns, **more)
