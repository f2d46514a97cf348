"""Bright places that never move: lamps, glare that flickers, hot pixels."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tracker.records import Recording, Sightings

_SPAN = 8.0  # s between the first and last sighting; in less, a slow droplet may stay in place
_LEAST = 30  # sightings at the place
_CELL = 1.0  # px
_STILL = 0.12  # px: more between its earlier and later sightings is motion
_SCATTER = 0.4  # px, standard deviation within a place


def on_fixed_places(sightings: Sightings, recording: Recording) -> NDArray[np.bool_]:
    """Which sightings lie at places that are seen again and again without any motion.

    Parameters
    ----------
    sightings : Sightings
    recording : Recording
        For the times of its frames.

    Returns
    -------
    fixed : ndarray of bool, shape (N,)

    Notes
    -----
    Brownian motion carries a droplet of 1 um radius some 10 um in 8 s, so what stays within a tenth of a pixel is
    none. Two grids, shifted by half a cell, catch a place at the border of a cell.
    """
    fixed = np.zeros(len(sightings), np.bool_)
    if len(sightings) < _LEAST:
        return fixed
    times = recording.frame_times[sightings.frame]
    for shift in (0.0, 0.5):
        column = np.floor(sightings.x / _CELL + shift).astype(np.int64)
        row = np.floor(sightings.y / _CELL + shift).astype(np.int64)
        cell = column * (int(row.max()) + 2) + row
        order = np.lexsort((times, cell))
        _, begin, count = np.unique(cell[order], return_index=True, return_counts=True)
        for b, c in zip(begin[count >= _LEAST], count[count >= _LEAST], strict=True):
            rows = order[b : b + c]
            if times[rows[-1]] - times[rows[0]] < _SPAN:
                continue
            fixed[rows] |= _never_moves(sightings, rows)
    return fixed


def _never_moves(sightings: Sightings, rows: NDArray[np.int64]) -> bool:
    """Whether the earlier and the later half of the sightings of a cell have one place."""
    half = len(rows) // 2
    for axis in (sightings.x[rows], sightings.y[rows]):
        still = _STILL + 3 * float(axis.std()) * (2 / len(rows)) ** 0.5
        if abs(float(np.median(axis[:half]) - np.median(axis[half:]))) > still or axis.std() > _SCATTER:
            return False
    return True
