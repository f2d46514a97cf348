"""Batch of pictures -> sightings: candidates, fits, neighbours, flags."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.records import Flag
from tracker.seeing.background import Pictures
from tracker.seeing.crowd import NEIGHBOUR, Pairs, fit_pairs, near_pairs, split_starts, without_others
from tracker.seeing.detect import cut_windows
from tracker.seeing.fit import Spots, Windows, fit_spots
from tracker.seeing.learn import Eyes
from tracker.seeing.streak import Streaks, fit_streaks

Rows = NDArray[np.int64]
Columns = dict[str, NDArray[Any]]

COLUMNS = ("frame", "x", "y", "x_std", "y_std", "brightness", "width", "flags", "strain", "score")
_ODD = 5.0  # standard deviations of a width or slant that one sharp spot would not show
_MOST_SPREAD = 2.5  # standard deviations; more is no noise of a codec but many fast or soft droplets
_ENOUGH = 40  # spots that tell the spread
_SPLIT_GAIN = 30.0  # fall of chi2 that makes two spots of one
_SPLIT_CLOSE = 2.2  # widths: nearer ones look like one wide spot and need more proof
_SPLIT_APART = 1.2  # widths, least distance of two spots found in one blob
_SPLIT_SHARE = 0.15  # least amplitude of the fainter against the brighter
_SOFT = 1.3  # widths: a spot this wide along both axes is out of focus
_MOST_EXCESS = 1.0  # light beside a spot over its own: more is a lamp or a scratch
_HALF_LIGHT = 0.4  # of the amplitude: mean of a spot's light over its slopes, which tell the place
_MOST_STD = (
    0.47  # widths, of a place: more is a signal to noise below 3 (sqrt(2) widths over it, in white noise)
)
_STREAK = 1.21  # widths: way within the exposure equal to the full width at half maximum widens to this


def look(eyes: Eyes, pictures: list[NDArray[Any]], numbers: Rows) -> Columns:
    """Sightings of a batch of pictures as columns.

    Parameters
    ----------
    eyes : Eyes
        What was learned of the recording.
    pictures : list of n ndarray of shape (height, width)
        Consecutive pictures.
    numbers : ndarray of shape (n,)
        Their frame numbers.

    Returns
    -------
    columns : dict
        Columns of `Sightings`, ordered by frame, `strain` as in `mend_deviations`, and `score`, the signal to noise of
        the matched filter; empty for no pictures.
    """
    if not pictures:
        return {}
    frame, x, y, score = eyes.detector.candidates(pictures)
    windows = _cut(eyes, pictures, frame, x, y, eyes.reach)
    width = np.full(len(x), eyes.width)
    spots = fit_spots(windows, (x, y), camera=eyes.camera, width=(width, width), rounds=2)
    sound = spots.good & (np.hypot(spots.x - x, spots.y - y) < 2 * eyes.width)
    sound &= spots.amplitude > 3 * np.sqrt(np.maximum(spots.covariance[:, 0, 0], 0))
    rows = np.flatnonzero(sound)
    frame, spots, windows = frame[rows], spots.take(rows), windows.take(rows)
    table = _table(spots, frame, score[rows])
    table["flags"] |= np.where(windows.bad.any((1, 2)), int(Flag.SATURATED), 0)
    crowded = near_pairs(frame, spots.x, spots.y, reach=NEIGHBOUR * eyes.width)
    table = _fit_neighbours(eyes, pictures, table, crowded)
    alone = np.ones(len(frame), np.bool_)
    alone[crowded.ravel()] = False
    table = _fit_odd(eyes, pictures, table, spots, np.flatnonzero((oddness(table["strain"]) > _ODD) & alone))
    spotlike = table["excess"] < _MOST_EXCESS
    return _finish(eyes, {k: v[spotlike] for k, v in table.items()}, numbers)


def oddness(strain: NDArray[np.float64]) -> NDArray[np.float64]:
    """How far width or slant are from a single sharp spot's, in deviations, judged by the spread among the batch.

    Parameters
    ----------
    strain : ndarray of shape (N, 3)
        Growth along x and y, and slant, in standard deviations.

    Returns
    -------
    oddness : ndarray of shape (N,)
    """
    shape = strain.copy()
    if len(shape) >= _ENOUGH:
        shape -= np.clip(np.median(shape, axis=0), -_MOST_SPREAD, _MOST_SPREAD)
        shape /= np.clip(1.4826 * np.median(np.abs(shape), axis=0), 1, _MOST_SPREAD)
    shape[:, 2] = np.abs(shape[:, 2])
    return np.asarray(shape.max(1, initial=-np.inf))


def _cut(
    eyes: Eyes, pictures: Pictures, frame: Rows, x: NDArray[np.float64], y: NDArray[np.float64], reach: int
) -> Windows:
    return cut_windows(
        pictures, (frame, x, y), reach=reach, background=eyes.background, full_scale=eyes.camera.full_scale
    )


def _table(spots: Spots, frame: Rows, score: NDArray[np.float64]) -> Columns:
    """Working columns: the fit's values, frames counted within the batch."""
    return {
        "frame": frame, "amplitude": spots.amplitude.copy(), "x": spots.x.copy(), "y": spots.y.copy(),
        "x_var": spots.covariance[:, 1, 1].copy(), "y_var": spots.covariance[:, 2, 2].copy(),
        "excess": spots.excess.copy(), "sx": spots.sx.copy(), "sy": spots.sy.copy(),
        "flags": np.zeros(len(frame), np.int64), "strain": np.column_stack([spots.growth, spots.slant]),
        "score": score.copy(),
    }  # fmt: skip


def _fit_neighbours(eyes: Eyes, pictures: Pictures, table: Columns, pairs: Rows) -> Columns:
    """Fit spots with a near neighbour again, jointly with it, all others taken off."""
    if len(pairs) == 0:
        return table
    table = {k: v.copy() for k, v in table.items()}
    i, j = pairs.T
    reach = pair_reach(eyes)
    x, y = (0.5 * (table[c][i] + table[c][j]) for c in "xy")
    windows = _cut(eyes, pictures, table["frame"][i], x, y, reach)
    for _ in range(2):
        start = np.stack([table[c][k] for k in (i, j) for c in ("amplitude", "x", "y")], 1)
        cleared = without_others(windows, table, pairs, eyes.width)
        fitted = fit_pairs(cleared, start, camera=eyes.camera, width=eyes.width, rounds=4)
        moved = np.hypot(
            fitted.values[:, [1, 4]] - start[:, [1, 4]], fitted.values[:, [2, 5]] - start[:, [2, 5]]
        )
        fine = (moved < eyes.width).all(1) & (fitted.values[:, [0, 3]] > 0.02).all(1)
        for rows, first in ((i, 0), (j, 3)):
            _write(table, rows[fine], fitted.take(fine), first)
        if cleared is windows:
            break
    table["flags"][np.unique(pairs)] |= int(Flag.CROWDED)
    return table


def pair_reach(eyes: Eyes) -> int:
    """Half side in px of a window that holds two neighbours."""
    most = int(min(eyes.background.level.shape) - 1) // 2
    return min(eyes.reach + math.ceil(NEIGHBOUR * eyes.width / 2), most)


def _write(table: Columns, rows: Rows, fitted: Pairs, first: int) -> None:
    """Put one spot of each pair into the table."""
    for i, name in enumerate(("amplitude", "x", "y")):
        table[name][rows] = fitted.values[:, first + i]
    table["excess"][rows] = fitted.excess
    table["x_var"][rows] = fitted.covariance[:, first + 1, first + 1]
    table["y_var"][rows] = fitted.covariance[:, first + 2, first + 2]


def _fit_odd(eyes: Eyes, pictures: Pictures, table: Columns, spots: Spots, rows: Rows) -> Columns:
    """Fit spots that are no single sharp ones: as streaks, with their own widths, or as two."""
    if len(rows) == 0:
        return table
    table = {k: v.copy() for k, v in table.items()}
    x, y = table["x"][rows], table["y"][rows]
    windows = _cut(eyes, pictures, table["frame"][rows], x, y, pair_reach(eyes))
    start = np.full(len(rows), eyes.width)
    wide = fit_spots(windows, (x, y), camera=eyes.camera, width=(start, start), free_width=True, rounds=8)
    fine = wide.good & (np.hypot(wide.x - x, wide.y - y) < 2 * eyes.width)
    fine &= (np.maximum(wide.sx, wide.sy) < 4 * eyes.width) & (
        np.minimum(wide.sx, wide.sy) > 0.4 * eyes.width
    )
    streaks = _streaks(eyes, windows, wide)
    moved = np.hypot(streaks.values[:, 1] - x, streaks.values[:, 2] - y)
    swept = fine & (streaks.chi2 < wide.chi2) & (moved < 3 * eyes.width)
    both = _best_split(eyes, windows, wide, spots.slant[rows] > 0)
    split = _is_two(eyes, both, wide, np.where(swept, streaks.chi2, wide.chi2))
    _write_wide(table, rows, wide, np.flatnonzero(fine & ~split & ~swept))
    _write_streaks(table, rows, streaks, np.flatnonzero(swept & ~split), eyes.width)
    two = np.flatnonzero(split)
    _write(table, rows[two], both.take(two), 0)
    table["flags"][rows[two]] |= int(Flag.CROWDED)
    more = {k: v[rows[two]].copy() for k, v in table.items()}
    _write(more, np.arange(len(two)), both.take(two), 3)
    return {k: np.concatenate([table[k], more[k]]) for k in table}


def _streaks(eyes: Eyes, windows: Windows, wide: Spots) -> Streaks:
    """Blobs fitted as streaks along their longer axis."""
    along_x = wide.sx > wide.sy
    half = np.sqrt(
        3 * np.maximum(np.maximum(wide.sx, wide.sy) ** 2 - eyes.width**2, 0)
    )  # way^2 / 12 adds to s^2
    peak = wide.amplitude * np.maximum(wide.sx, wide.sy) / eyes.width
    return fit_streaks(
        windows, (peak, wide.x, wide.y), half=half, along_x=along_x, camera=eyes.camera, width=eyes.width
    )


def _write_wide(table: Columns, rows: Rows, wide: Spots, use: Rows) -> None:
    """Put fits with free width into the table."""
    at = rows[use]
    for name in ("amplitude", "x", "y", "sx", "sy"):
        table[name][at] = getattr(wide, name)[use]
    table["excess"][at] = wide.excess[use]
    table["x_var"][at], table["y_var"][at] = wide.covariance[use, 1, 1], wide.covariance[use, 2, 2]
    table["flags"][at[np.abs(wide.slant[use]) > _ODD]] |= int(Flag.MERGED)


def _write_streaks(table: Columns, rows: Rows, streaks: Streaks, use: Rows, width: float) -> None:
    """Put streaks into the table, as a spot of the same light and second moments."""
    at, values = rows[use], streaks.values[use]
    long = np.sqrt(width**2 + values[:, 3] ** 2 / 3)
    lying = streaks.along_x[use]
    table["x"][at], table["y"][at] = values[:, 1], values[:, 2]
    table["sx"][at], table["sy"][at] = np.where(lying, long, width), np.where(lying, width, long)
    table["amplitude"][at] = values[:, 0] * width / long
    table["x_var"][at], table["y_var"][at] = streaks.covariance[use, 1, 1], streaks.covariance[use, 2, 2]
    table["excess"][at] = 0


def _best_split(eyes: Eyes, windows: Windows, wide: Spots, slant: NDArray[np.bool_]) -> Pairs:
    """Two spots in each blob, from the best of several first guesses."""
    blob = np.stack([wide.amplitude, wide.x, wide.y], 1)
    tries = [
        fit_pairs(windows, start, camera=eyes.camera, width=eyes.width)
        for start in split_starts(blob, eyes.width, wide.sx, wide.sy, slant)
    ]
    best = np.argmin([np.where(np.isfinite(t.chi2), t.chi2, np.inf) for t in tries], axis=0)
    rows = np.arange(len(best))
    return Pairs(
        np.stack([t.values for t in tries])[best, rows], np.stack([t.covariance for t in tries])[best, rows],
        np.stack([t.chi2 for t in tries])[best, rows], np.stack([t.excess for t in tries])[best, rows],
    )  # fmt: skip


def _is_two(eyes: Eyes, both: Pairs, wide: Spots, chi2: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Whether two sharp spots explain a blob clearly better than one wide or swept one does."""
    amplitude, apart = both.values[:, [0, 3]], both.separation / eyes.width
    needed = _SPLIT_GAIN * (1 + (_SPLIT_CLOSE / np.maximum(apart, 0.1)) ** 4)
    near = np.hypot(both.values[:, [1, 4]] - wide.x[:, None], both.values[:, [2, 5]] - wide.y[:, None])
    return np.asarray(
        (both.chi2 < chi2 - needed)
        & (amplitude.min(1) > _SPLIT_SHARE * amplitude.max(1))
        & (apart > _SPLIT_APART)
        & (near.max(1) < NEIGHBOUR * eyes.width)
        & (both.covariance[:, [1, 2, 4, 5], [1, 2, 4, 5]] < eyes.width**2).all(1)
    )


def _finish(eyes: Eyes, table: Columns, numbers: Rows) -> Columns:
    """Columns of `Sightings` from the working table, ordered by frame, with the flags that place and width set."""
    height, breadth = eyes.background.level.shape
    x, y = table["x"], table["y"]
    flags = table["flags"]
    rim = 2 * eyes.width
    edge = (x < rim) | (y < rim) | (x > breadth - 1 - rim) | (y > height - 1 - rim)
    flags = flags | np.where(edge, int(Flag.EDGE), 0)
    column = np.clip(np.rint(x).astype(int), 0, breadth - 1)
    row = np.clip(np.rint(y).astype(int), 0, height - 1)
    flags |= np.where(eyes.background.shade[row, column] < 0.97, int(Flag.LINE), 0)
    wide = np.sort(np.stack([table["sx"], table["sy"]]), axis=0) / eyes.width
    flags |= np.where(wide[0] > _SOFT, int(Flag.SOFT), 0)
    flags |= np.where((wide[1] > _STREAK) & (wide[0] <= _SOFT), int(Flag.STREAK), 0)
    grey = eyes.background.level[row, column] - eyes.camera.black + _HALF_LIGHT * table["amplitude"]
    excess = (eyes.noise.read_variance + eyes.noise.gain * grey) / (
        eyes.camera.read_variance + eyes.camera.gain * grey
    )
    excess = np.maximum(excess, 1) * (1 + eyes.background.variance)
    out = {
        "frame": numbers[table["frame"]], "x": x, "y": y, "flags": flags,
        "x_std": np.sqrt(np.maximum(table["x_var"] * excess, 1e-12)),
        "y_std": np.sqrt(np.maximum(table["y_var"] * excess, 1e-12)),
        "width": np.sqrt(table["sx"] * table["sy"]),
        "brightness": 2 * np.pi * table["amplitude"] * table["sx"] * table["sy"],
        "strain": table["strain"] / np.sqrt(excess)[:, None], "score": table["score"],
    }  # fmt: skip
    kept = (x > -0.5) & (y > -0.5) & (x < breadth - 0.5) & (y < height - 0.5)
    kept &= np.minimum(out["x_std"], out["y_std"]) < _MOST_STD * out["width"]
    order = np.argsort(out["frame"], kind="stable")
    return {name: out[name][order[kept[order]]] for name in COLUMNS}
