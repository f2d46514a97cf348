"""What a set of numbered marks must show before it is taken for a reference pattern."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calibration.lattice import SAME, Marks

FloatArray = NDArray[np.float64]

LEAST_LINES = 4
LEAST_STRIPS = 3  # a line must be seen in so many strips
FEW = 0.3  # of the usual number of marks: a line with fewer is none


@dataclass(frozen=True, slots=True)
class Refusal:
    """Why one kind of pattern was not taken; of several, the one that came farthest is told."""

    why: str
    progress: int


def judge_lines(coordinate: FloatArray, contrast: FloatArray, *, strips: int) -> Refusal | None:
    """Say what speaks against a family of ruled lines.

    Parameters
    ----------
    coordinate : ndarray of shape (N,)
        Lattice coordinate of each mark.
    contrast : ndarray of shape (N,)
        Of each mark.
    strips : int
        Into which the picture was cut along the lines.

    Returns
    -------
    refusal : Refusal or None
        None: nothing does.
    """
    index = np.rint(coordinate).astype(np.int64)
    near = np.abs(coordinate - index) < SAME
    lines, count = np.unique(index[near], return_counts=True)
    usual = float(np.median(count)) if len(count) else 0.0
    if usual < min(LEAST_STRIPS, max(2, strips // 3)):
        return Refusal("no lines, grid or dots stand out from the picture", 1)
    real = lines[count >= max(2.0, FEW * usual)]
    if len(real) < LEAST_LINES - 1:
        return Refusal(f"only {len(real)} lines are in the picture; at least {LEAST_LINES} are needed", 4)
    across = (coordinate > real[0] - 0.5) & (coordinate < real[-1] + 0.5)
    even = contrast[across & near].sum() / contrast[across].sum()
    if even < 0.6:
        return _uneven(coordinate[across], usual) or Refusal(
            "lines are there, but they are not evenly spaced", 3
        )
    return rival(coordinate[across], contrast[across])


def real_lines(coordinate: FloatArray, contrast: FloatArray) -> NDArray[np.bool_]:
    """Choose the marks that lie on whole numbers, on lines with enough marks, and are no weak ends of lines.

    Parameters
    ----------
    coordinate : ndarray of shape (N,)
        Lattice coordinate of each mark.
    contrast : ndarray of shape (N,)
        Of each mark.

    Returns
    -------
    real : ndarray of bool of shape (N,)
        Marks to fit.
    """
    index = np.rint(coordinate).astype(np.int64)
    near = np.abs(coordinate - index) < SAME
    slot = index - index.min()
    count = np.bincount(slot[near], minlength=int(slot.max()) + 1)
    usual = np.median(count[count > 0])
    real: NDArray[np.bool_] = near & (count >= max(2.0, FEW * usual))[slot]
    for line in np.unique(slot[real]):
        own = real & (slot == line)
        real[own] = contrast[own] > 0.8 * np.median(contrast[own])
    return real


def _uneven(coordinate: FloatArray, usual: float) -> Refusal | None:
    """Name the shorter pitch if the marks off the lattice stand at even places too."""
    for parts in (2, 3):
        fine = coordinate * parts
        off = np.abs(fine - np.rint(fine)) < SAME
        if off.mean() > 0.85 and len(coordinate) > 4 * usual:
            return Refusal(f"the pitch has a rival at 1/{parts} of its value", 5)
    return None


def rival(coordinate: FloatArray, contrast: FloatArray) -> Refusal | None:
    """Say whether half or twice the pitch would do as well.

    Parameters
    ----------
    coordinate : ndarray of shape (N,)
        One lattice coordinate of each mark, marks off the lattice included.
    contrast : ndarray of shape (N,)
        Of each mark.

    Returns
    -------
    refusal : Refusal or None
        None: no rival.

    Notes
    -----
    Twice the pitch would do if nearly half of every other line were missing, or if they were less than half as
    strong; half of it, if at least every third place midway between two lines held a line too.
    """
    index = np.rint(coordinate).astype(np.int64)
    near = np.abs(coordinate - index) < SAME
    first, last = int(index[near].min()), int(index[near].max())
    sites = last - first + 1
    count = np.bincount(index[near] - first, minlength=sites)
    usual = float(np.median(count[count > 0]))
    seen = count >= FEW * usual
    if seen.mean() < 0.5:
        return Refusal("more than half of the lines between the first and the last are missing", 4)
    strength = np.bincount(index[near] - first, contrast[near], sites) / np.maximum(count, 1)
    shares, levels = [], []
    for parity in (0, 1):
        shares.append(float(seen[parity::2].mean()))
        levels.append(
            float(np.median(strength[parity::2][seen[parity::2]])) if seen[parity::2].any() else 0.0
        )
    # A ruling may be finer at one end than at the other; a few lines may lose one of two by chance.
    least = 0.6 if sites >= 10 else 0.34
    if min(shares) < least * max(shares) or min(levels) < 0.5 * max(levels):
        return Refusal("the pitch has a rival at twice its value: every other line is missing or faint", 5)
    midway = (
        np.floor(coordinate[np.abs(coordinate - np.floor(coordinate) - 0.5) < 0.15]).astype(np.int64) - first
    )
    between = np.bincount(midway[(midway >= 0) & (midway < sites - 1)], minlength=max(1, sites - 1))
    if (between >= FEW * usual).mean() > 0.34:
        return Refusal("the pitch has a rival at half its value: lines stand midway between the lines", 5)
    return None


def largest_block(coordinate: FloatArray) -> NDArray[np.bool_]:
    """Find the largest connected block of nodes at whole numbers; strays elsewhere are left out.

    Parameters
    ----------
    coordinate : ndarray of shape (N, 2)
        Lattice coordinates.

    Returns
    -------
    block : ndarray of bool of shape (N,)
        At most one node for each place of the lattice: the nearest.
    """
    import cv2

    number = np.rint(coordinate)
    distance = np.abs(coordinate - number).max(axis=1)
    near = (distance < SAME) & (np.abs(number) < 4000).all(axis=1)
    block = np.zeros(len(coordinate), dtype=bool)
    if not near.any():
        return block
    rows = np.flatnonzero(near)
    rows = rows[np.argsort(-distance[rows], kind="stable")]
    site = number[rows].astype(np.int64) - number[rows].min(axis=0).astype(np.int64)
    table = np.full(site.max(axis=0) + 1, -1, dtype=np.int64)
    table[site[:, 0], site[:, 1]] = rows  # the nearest comes last and stays
    count, parts = cv2.connectedComponents((table >= 0).astype(np.uint8), connectivity=8)
    largest = 1 + int(np.argmax(np.bincount(parts.ravel(), minlength=count)[1:]))
    block[table[(parts == largest) & (table >= 0)]] = True
    return block


def inner_nodes(coordinate: FloatArray, block: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Leave out nodes at the rim, which the field stop or the pattern's own edge may cut, if enough are left.

    Parameters
    ----------
    coordinate : ndarray of shape (N, 2)
        Lattice coordinates.
    block : ndarray of bool of shape (N,)
        Nodes that were numbered.

    Returns
    -------
    inner : ndarray of bool of shape (N,)
        Those with a neighbour on all four sides; the whole block where fewer than 36 have that or half are lost.
    """
    number = np.rint(coordinate[block]).astype(np.int64)
    number -= number.min(axis=0) - 1
    table = np.zeros(number.max(axis=0) + 2, dtype=bool)
    table[number[:, 0], number[:, 1]] = True
    sides = [table[number[:, 0] + i, number[:, 1] + j] for i, j in ((1, 0), (-1, 0), (0, 1), (0, -1))]
    all_sides = np.all(sides, axis=0)
    if all_sides.sum() < max(36, 0.5 * len(number)):
        return block
    inner = block.copy()
    inner[block] = all_sides
    return inner


def judge_nodes(coordinate: FloatArray, block: NDArray[np.bool_]) -> Refusal | None:
    """Say what speaks against a lattice of dots or corners.

    Parameters
    ----------
    coordinate : ndarray of shape (N, 2)
        Lattice coordinates of all candidates.
    block : ndarray of bool of shape (N,)
        Those that were numbered.

    Returns
    -------
    refusal : Refusal or None
        None: nothing does.
    """
    if block.sum() < 12:
        return Refusal("spots are there, but they stand in no square lattice", 2)
    index = np.rint(coordinate[block]).astype(np.int64)
    low, high = index.min(axis=0), index.max(axis=0)
    span = high - low + 1
    if span.max() < LEAST_LINES or span.min() < LEAST_LINES - 1:
        return Refusal(
            f"only {span[0]} x {span[1]} dots are in the picture; {LEAST_LINES} rows are needed", 4
        )
    if block.sum() < 0.35 * span.prod() and len(index) < 60:
        return Refusal("more than half of the dots between the first and the last are missing", 3)
    inside = ((coordinate > low - 0.5) & (coordinate < high + 0.5)).all(axis=1)
    if block.sum() < 0.6 * inside.sum():
        return Refusal("spots are there, but too few of them stand in a lattice", 3)
    return _node_rival(index - low, span) or _strays(coordinate[inside & ~block], int(block.sum()))


def _node_rival(index: NDArray[np.int64], span: NDArray[np.int64]) -> Refusal | None:
    """Say whether twice the pitch would do: every other row or column of dots is missing."""
    for axis in (0, 1):
        count = np.bincount(index[:, axis], minlength=int(span[axis])).astype(float)
        even, odd = float(np.median(count[::2])), float(np.median(count[1::2]))
        if min(even, odd) < 0.34 * max(even, odd):
            return Refusal("the pitch has a rival at twice its value: every other row of dots is missing", 5)
    return None


def _strays(coordinate: FloatArray, found: int) -> Refusal | None:
    """Say whether half the pitch would do: spots of like size stand midway between the dots."""
    half = 2 * coordinate
    midway = (np.abs(half - np.rint(half)) < 2 * 0.15).all(axis=1)
    if midway.sum() > 0.34 * found:
        return Refusal("the pitch has a rival at half its value: dots stand midway between the dots", 5)
    return None


def is_board(flat: NDArray[np.float32], marks: Marks) -> bool:
    """Tell a chessboard, whose squares are of one grey to their edges, from dots or cells that also have saddles.

    Parameters
    ----------
    flat : ndarray of float32
        Flattened picture.
    marks : Marks
        Of the corners, both coordinates.

    Returns
    -------
    board : bool
        True if squares differ from their neighbours near the middles of their edges (at 0.15 of their width) by at
        least 0.6 of what their middles do, and near their corners (at 0.12) by at least 0.35. Dots and crossings
        of thin lines fail at the edges, cells between thick lines at the corners.
    """
    first = marks.axis == 0
    count = int(first.sum())
    index = np.stack([marks.index[:count], marks.index[count:]], axis=1)
    index = index - index.min(axis=0)
    place = np.full((*(index.max(axis=0) + 2), 2), np.nan)
    place[index[:, 0], index[:, 1]] = np.stack([marks.x[:count], marks.y[:count]], axis=1)
    corner = place[:-1, :-1], place[1:, :-1], place[:-1, 1:], place[1:, 1:]
    whole = np.isfinite(np.sum(corner, axis=0)).all(axis=-1)
    parity = np.add.outer(np.arange(place.shape[0] - 1), np.arange(place.shape[1] - 1))[whole] % 2 * 2 - 1
    if len(parity) < 6 or abs(parity.sum()) == len(parity):
        return False
    near_edge = ((0.15, 0.5), (0.85, 0.5), (0.5, 0.15), (0.5, 0.85))
    near_corner = ((0.12, 0.12), (0.88, 0.12), (0.12, 0.88), (0.88, 0.88))
    differences = []
    for u, v in ((0.5, 0.5), *near_edge, *near_corner):
        at = (
            (1 - u) * (1 - v) * corner[0]
            + u * (1 - v) * corner[1]
            + (1 - u) * v * corner[2]
            + u * v * corner[3]
        )
        at = np.rint(at[whole]).astype(int)
        grey = flat[at[:, 1].clip(0, flat.shape[0] - 1), at[:, 0].clip(0, flat.shape[1] - 1)].astype(
            np.float64
        )
        differences.append(float(np.median(grey[parity > 0]) - np.median(grey[parity < 0])))
    share = np.array(differences[1:]) / (differences[0] or np.inf)
    return bool((share[:4] > 0.6).all() and (share[4:] > 0.35).all())
