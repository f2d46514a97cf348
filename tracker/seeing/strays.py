"""Sightings that no other confirms: their rate on the recording, and the threshold at which it is the one asked for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, IntArray, Sightings
from tracker.seeing.link import components

_BRIEF = 4  # sightings; a larger group is something that lasts
_AROUND = (-2, -1, 1, 2)  # frames before a piece and after it in which a droplet would be seen again
_LONG = 15  # sightings of a droplet's piece, which needs no threshold
_STEPS = 50  # that are enough to tell
_FROZEN = 0.1  # of the usual way: one droplet in a hundred goes less by chance
_FROZEN_NOISE = 0.2  # of the deviation of a place: two droplets at rest in a hundred seem to go less
_OFTEN_FROZEN = 1 / 3  # of the steps of a piece
_WEAK = 8.0  # spot width over the deviation of its place: clearer ones are no flecks
_NEAREST, _MOST_REACH = 3.0, 60.0  # px


@dataclass(frozen=True, slots=True)
class Alarms:
    """What the sightings of a recording tell of false ones."""

    keep: NDArray[np.bool_]  # (N,) sightings that stay
    threshold: float  # signal to noise up to which strays are left out; 0 where none is
    false: (
        float | None
    )  # sightings that are held for false among those that stay; None: too few frames to tell


def count_alarms(
    sightings: Sightings, score: FloatArray, piece: IntArray, *, accepted: float, room: float,
    firm: float = 0.0,
) -> Alarms:  # fmt: skip
    """Leave out the faintest strays until there are no more than are accepted.

    Parameters
    ----------
    sightings : Sightings
    score : ndarray of shape (N,)
        Signal to noise of each after the matched filter.
    piece : ndarray of shape (N,)
        Piece of a track of each.
    accepted : float
        False sightings in the whole recording.
    room : float
        Area of all pictures that were looked at, in px^2.
    firm : float
        Threshold for recordings too short to tell strays.

    Returns
    -------
    alarms : Alarms

    Notes
    -----
    The threshold of the filter is set from sample pictures, and holds where false maxima are as frequent as minima.
    What a codec adds is seldom so even. A droplet is seen for many frames, so what is seen once is a false alarm,
    or a droplet in passing at the rim, which counts as one. In a crowd some of the false ones have a droplet
    near them by chance: that share of the picture is allowed for. What a codec shows faint and frozen is no droplet
    either; a clear droplet is frozen too where it moves by less from picture to picture than the codec mends.
    Where the threshold has to be raised, what is seen a few times in a row must exceed it once.
    """
    keep = np.ones(len(sightings), np.bool_)
    if len(sightings) == 0 or np.ptp(sightings.frame) < _LONG:
        return Alarms(score > firm, 0.0, None if len(sightings) else 0.0)
    reach, usual = _ways(sightings, piece)
    group, covered = _groups(sightings, piece, reach)
    size = np.bincount(group)[group]
    weak = sightings.width < _WEAK * np.minimum(sightings.x_std, sightings.y_std)
    stray = (size <= _BRIEF) | (weak & _frozen(sightings, piece, usual))
    free = max(1 - covered / room, 0.1)
    most = int(accepted * free)
    rows = np.flatnonzero(stray)
    if len(rows) <= most:
        return Alarms(keep, 0.0, len(rows) / free)
    order = rows[np.argsort(-score[rows], kind="stable")]
    threshold = float(score[order[most]])
    keep[order[most:]] = False
    keep &= (size >= _LONG) | (_highest(score, group) > threshold)
    return Alarms(keep, threshold, most / free)


def _highest(score: FloatArray, group: IntArray) -> FloatArray:
    """Highest score of each one's group."""
    highest = np.zeros(int(group.max()) + 1)
    np.maximum.at(highest, group, score)
    return highest[group]


def _ways(sightings: Sightings, piece: IntArray) -> tuple[float, float]:
    """Longest and usual way from frame to frame, from pieces that last; 0 for the latter where there are few."""
    lasting = np.bincount(piece)[piece] >= _LONG
    rows = np.flatnonzero(lasting)
    rows = rows[np.lexsort((sightings.frame[rows], piece[rows]))]
    next_to = (np.diff(piece[rows]) == 0) & (np.diff(sightings.frame[rows]) == 1)
    way = np.hypot(np.diff(sightings.x[rows]), np.diff(sightings.y[rows]))[next_to]
    if len(way) < _STEPS:
        return 2 * _NEAREST, 0.0
    usual = float(np.median(way))
    noise = float(np.median(np.hypot(sightings.x_std, sightings.y_std)))
    reach = float(np.clip(1.2 * np.quantile(way, 0.99) + 1, _NEAREST, _MOST_REACH))
    return reach, usual if usual > 2 * noise else 0.0


def _groups(sightings: Sightings, piece: IntArray, reach: float) -> tuple[IntArray, float]:
    """Pieces grouped with what precedes or follows short ones, for each sighting; px^2 in which that is seen."""
    from scipy.spatial import cKDTree

    rows = np.flatnonzero(np.bincount(piece)[piece] < _LONG)
    apart = 4 * reach * max(abs(f) for f in _AROUND)
    tree = cKDTree(np.column_stack([sightings.x, sightings.y, apart * sightings.frame]))
    pairs, area = [np.empty((0, 2), np.int64)], 0.0
    for shift in _AROUND:
        radius = reach * abs(shift) ** 0.5
        at = np.column_stack([sightings.x[rows], sightings.y[rows], apart * (sightings.frame[rows] + shift)])
        near = tree.query_ball_point(at, radius)
        owner = np.repeat(rows, [len(n) for n in near])
        other = np.concatenate([np.asarray(n, np.int64) for n in near]) if len(rows) else owner
        pairs.append(piece[np.column_stack([owner, other])])
        area += np.pi * radius**2 * len(sightings)
    return components(int(piece.max()) + 1, np.concatenate(pairs))[piece], area


def _frozen(sightings: Sightings, piece: IntArray, usual: float) -> NDArray[np.bool_]:
    """Sightings of pieces that hardly move at any step, where droplets do."""
    if usual == 0:
        return np.zeros(len(sightings), np.bool_)
    order = np.lexsort((sightings.frame, piece))
    same = np.diff(piece[order]) == 0
    owner = piece[order][1:][same]
    way = np.hypot(np.diff(sightings.x[order]), np.diff(sightings.y[order]))[same]
    noise = np.hypot(sightings.x_std, sightings.y_std)[order][1:][same]
    steps = np.bincount(owner, minlength=int(piece.max()) + 1)
    frozen = np.bincount(owner, way < np.minimum(_FROZEN * usual, _FROZEN_NOISE * noise), len(steps))
    return np.asarray((steps > 0) & (frozen >= _OFTEN_FROZEN * steps))[piece]
