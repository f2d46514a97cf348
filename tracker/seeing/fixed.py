"""Bright places that never move: lamps, glare that flickers, hot pixels."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, IntArray, Recording, Sightings

_WANDER = 2.0  # px that a droplet would wander between the first and last sighting of the place
_LEAST = 30  # sightings at the place
_CELL = 1.0  # px
_STILL = 0.12  # px: more between its earlier and later sightings is motion
_SCATTER = 0.4  # px, standard deviation within a place
_RANGE = (
    4 * _SCATTER
)  # px, from the lowest twentieth to the highest: a piece of a track with more of it moves


def on_fixed_places(sightings: Sightings, piece: IntArray, recording: Recording) -> NDArray[np.bool_]:
    """Which sightings lie at places that are seen again and again without any motion.

    Parameters
    ----------
    sightings : Sightings
    piece : ndarray of shape (N,)
        Piece of a track of each, for the usual diffusion.
    recording : Recording
        For the times of its frames.

    Returns
    -------
    fixed : ndarray of bool, shape (N,)

    Notes
    -----
    A place counts after the time in which the recording's own droplets diffuse by 2 px; where nothing moves, nothing
    is left out. Two grids, shifted by half a cell, catch a place at the border of a cell. What was followed out of
    a place is a droplet that rested there: one in a thousand covers less than the range in that time, twice over.
    """
    fixed = np.zeros(len(sightings), np.bool_)
    if len(sightings) < _LEAST:
        return fixed
    times = recording.frame_times[sightings.frame]
    diffusion = _usual_diffusion(sightings, piece, times)
    if diffusion <= 0:
        return fixed
    resting = np.flatnonzero(~_moving(sightings, piece))
    for shift in (0.0, 0.5):
        column, row = (
            np.floor(a[resting] / _CELL + shift).astype(np.int64) for a in (sightings.x, sightings.y)
        )
        cell = column * (int(row.max(initial=0)) + 2) + row
        order = np.lexsort((times[resting], cell))
        _, begin, count = np.unique(cell[order], return_index=True, return_counts=True)
        for b, c in zip(begin[count >= _LEAST], count[count >= _LEAST], strict=True):
            rows = resting[order[b : b + c]]
            if times[rows[-1]] - times[rows[0]] > _WANDER**2 / (2 * diffusion):
                fixed[rows] |= _never_moves(sightings, rows)
    return fixed


def _moving(sightings: Sightings, piece: IntArray) -> NDArray[np.bool_]:
    """Sightings of pieces that have left their place."""
    count = np.bincount(piece)
    begin = np.cumsum(count) - count
    low, high = begin + count // 20, begin + count - 1 - count // 20
    long = count >= _LEAST
    moves = np.zeros(len(count), np.bool_)
    for axis in (sightings.x, sightings.y):
        ordered = axis[np.lexsort((axis, piece))]
        moves[long] |= ordered[high[long]] - ordered[low[long]] > _RANGE
    return moves[piece]


def _usual_diffusion(sightings: Sightings, piece: IntArray, times: FloatArray) -> float:
    """Median diffusion in px^2/s from second differences along pieces, which steady motion does not change."""
    order = np.lexsort((times, piece))
    number, frame = piece[order], sightings.frame[order]
    whole = (number[2:] == number[:-2]) & (frame[2:] - frame[:-2] == 2)
    if np.count_nonzero(whole) < _LEAST:
        return 0.0
    x = sightings.x[order]
    bend = (x[2:] - 2 * x[1:-1] + x[:-2])[whole]
    step = float(np.median(np.diff(times[order])[1:][whole]))
    noise = float(np.median(sightings.x_std**2))
    # a second difference holds two steps of 2 D dt each and six places' noise; 0.4549: median of a squared normal
    return (float(np.median(bend**2)) / 0.4549 - 6 * noise) / (4 * step)


def _never_moves(sightings: Sightings, rows: NDArray[np.int64]) -> bool:
    """Whether the earlier and the later half of the sightings of a cell have one place."""
    half = len(rows) // 2
    for axis in (sightings.x[rows], sightings.y[rows]):
        still = _STILL + 3 * float(axis.std()) * (2 / len(rows)) ** 0.5
        if abs(float(np.median(axis[:half]) - np.median(axis[half:]))) > still or axis.std() > _SCATTER:
            return False
    return True
