"""Droplets that met: whether the tracks leave the meeting as they came or exchanged."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tracker.records import Sightings
from tracker.seeing.clocks import Clocks
from tracker.seeing.stitch import Motion, describe, likelihood_ratio

IntArray = NDArray[np.int64]

_MEETING = 4.0  # px: nearer tracks may be confused
_APART_FRAMES = 12  # meetings with fewer frames between are one
_MARGIN = 2.0  # log likelihood ratio that an exchange needs
_ROUNDS = 2


def untangle(sightings: Sightings, piece: IntArray, clocks: Clocks) -> IntArray:
    """Exchange the tails of tracks that met where velocities, places and brightness say so.

    Parameters
    ----------
    sightings : Sightings
        Ordered by frame.
    piece : ndarray of shape (N,)
        Track of each sighting.
    clocks : Clocks

    Returns
    -------
    piece : ndarray of shape (N,)

    Notes
    -----
    A joint fit of two spots that almost coincide cannot tell which is which, so what was linked through a meeting
    is weighed anew: the parts before and after are long, and their velocities at each voltage are sharp.
    """
    piece = piece.copy()
    for _ in range(_ROUNDS):
        _, motion = describe(sightings, piece, clocks)
        changed = False
        for first, last, one, other in _meetings(sightings, piece):
            changed |= _weigh(sightings, piece, clocks, motion, (first, last, one, other))
        if not changed:
            break
    return piece


def _meetings(sightings: Sightings, piece: IntArray) -> list[tuple[int, int, int, int]]:
    """First and last frame of each meeting, and the two tracks, in order of time.

    Tracks meet where both are seen near each other, or where one is missing next to the other.
    """
    from scipy.spatial import cKDTree

    plane = sightings.frame * (10 * _MEETING)
    tree = cKDTree(np.column_stack([sightings.x, sightings.y, plane]))
    pairs = tree.query_pairs(_MEETING, output_type="ndarray")
    if len(pairs) == 0:
        return []
    count = np.bincount(piece)
    pairs = pairs[(count[piece[pairs]] > 2 * _APART_FRAMES).all(1)]
    if len(pairs) == 0:
        return []
    tracks = np.sort(piece[pairs], axis=1)
    frame = sightings.frame[pairs[:, 0]]
    order = np.lexsort((frame, tracks[:, 1], tracks[:, 0]))
    tracks, frame = tracks[order], frame[order]
    new = np.ones(len(frame), np.bool_)
    new[1:] = (np.diff(tracks, axis=0) != 0).any(1) | (np.diff(frame) > _APART_FRAMES)
    begin = np.flatnonzero(new)
    end = np.append(begin[1:], len(frame)) - 1
    found = [
        (int(frame[b]), int(frame[e]), int(tracks[b, 0]), int(tracks[b, 1]))
        for b, e in zip(begin, end, strict=True)
    ]
    return sorted(found)


def _weigh(
    sightings: Sightings, piece: IntArray, clocks: Clocks, motion: Motion, meeting: tuple[int, int, int, int]
) -> bool:
    """Exchange the tails of one meeting if that is likelier; tell whether it was."""
    first, last, one, other = meeting
    rows = np.flatnonzero((piece == one) | (piece == other))
    frame = sightings.frame[rows]
    late = frame > last
    near = ~late & (frame >= first)
    part = 2 * late + (piece[rows] == other)  # 0, 1 before; 2, 3 after
    clear = rows[~near]
    counts = np.bincount(part[~near], minlength=4)
    if (counts < _APART_FRAMES).any():
        return False
    pieces, _ = describe(sightings.take(clear), part[~near], clocks)
    a, b = np.array([0, 1, 0, 1]), np.array([2, 3, 3, 2])
    gain = likelihood_ratio(sightings.take(clear), pieces, motion, clocks, (a, b))
    if gain[2] + gain[3] < gain[0] + gain[1] + _MARGIN:
        return False
    middle = 0.5 * (first + last)
    tail = rows[frame > middle]
    piece[tail] = one + other - piece[tail]
    return True
