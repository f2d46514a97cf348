"""Sightings -> tracks: plain links between frames first, then pieces joined by what their motion foretells."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tracker.records import Field, Recording, Seen, Settings, Sightings, Tracks
from tracker.seeing.clocks import Clocks, clocks_of
from tracker.seeing.parting import part_meetings
from tracker.seeing.stitch import join_pieces
from tracker.seeing.untangle import untangle

IntArray = NDArray[np.int64]

_CROWDING = 0.06  # other droplets expected within the first gate
_STEADY = 2  # frames: a droplet is seen at least so often in half of its life; flecks of noise are not
_FAINT = 1.6  # times the brightness that a hundredth of the sightings does not reach
_WEAK = 8.0  # signal to noise: the width of a spot over the standard deviation of its place
_NOISE = 5.0  # of the same: what noise can reach
_DIM = 0.15  # of the usual brightness of clear droplets
_RESTING = 0.7  # of the usual mean root of the way between frames
_LEAST_GATE, _MOST_GATE = 4.0, 60.0  # px


def link(seen: Seen, *, field: Field | None, settings: Settings) -> Tracks:
    """Join the sightings of each droplet.

    Parameters
    ----------
    seen : Seen
        What `see` found.
    field : Field or None
        Voltage over time; None if unknown.
    settings : Settings
        `min_frames`: shorter tracks are left out.

    Returns
    -------
    tracks : Tracks
        Numbered by their first frame; empty if nothing lasts.

    Notes
    -----
    Two sightings in consecutive frames are linked at once when neither has another partner within reach. What
    is left are pieces of tracks, which are joined by maximum likelihood: place foretold from the velocities
    at each voltage of both pieces, Brownian spread, brightness. Diffusion, velocities and brightness are
    learned from the recording.
    """
    sightings = seen.sightings
    if len(sightings) == 0:
        return Tracks(np.empty(0, np.int64), sightings)
    clocks = clocks_of(seen.recording, field)
    box = (seen.recording.width, seen.recording.height)
    pieces = link_frames(sightings, clocks, box=box, cuts=seen.cuts)
    pieces = join_pieces(sightings, pieces, clocks, box=box, cuts=seen.cuts)
    pieces = untangle(sightings, pieces, clocks)
    if seen.cutouts is not None:
        sightings, pieces = part_meetings(sightings, pieces, clocks, seen.cutouts)
    return _tracks(sightings, pieces, settings.min_frames)


def first_pieces(sightings: Sightings, recording: Recording) -> IntArray:
    """Pieces of tracks from links that leave no choice, before anything else is known.

    Parameters
    ----------
    sightings : Sightings
    recording : Recording

    Returns
    -------
    piece : ndarray of shape (N,)
    """
    if len(sightings) == 0:
        return np.empty(0, np.int64)
    clocks = clocks_of(recording, None)
    return link_frames(sightings, clocks, box=(recording.width, recording.height), cuts=np.empty(0, np.int64))


def link_frames(sightings: Sightings, clocks: Clocks, *, box: tuple[int, int], cuts: IntArray) -> IntArray:
    """Number of the piece to which each sighting belongs, from links that leave no choice.

    Parameters
    ----------
    sightings : Sightings
    clocks : Clocks
    box : tuple of int
        Width and height of the picture in px.
    cuts : ndarray
        Frames before which no link may start.

    Returns
    -------
    piece : ndarray of shape (N,)
    """
    frames, order = np.unique(sightings.frame, return_inverse=True)
    density = len(sightings) / len(frames) / (box[0] * box[1])
    gate = float(np.clip(np.sqrt(_CROWDING / (np.pi * density)), _LEAST_GATE, _MOST_GATE))
    pairs = _lone_pairs(sightings, order, gate)
    if len(pairs) > 50:
        way = np.hypot(*(np.diff(a[pairs], axis=1)[:, 0] for a in (sightings.x, sightings.y)))
        reach = float(np.quantile(way, 0.999)) * 1.2 + 1
        pairs = _lone_pairs(sightings, order, float(np.clip(reach, _LEAST_GATE, gate)))
    a, b = sightings.frame[pairs[:, 0]], sightings.frame[pairs[:, 1]]
    step = np.diff(clocks.times[frames])
    usual = float(np.median(step)) if len(step) else 0.0
    close = clocks.times[b] - clocks.times[a] < 4.5 * usual
    close &= np.searchsorted(cuts, a, side="right") == np.searchsorted(cuts, b, side="right")
    return components(len(sightings), pairs[close])


def _lone_pairs(sightings: Sightings, order: IntArray, gate: float) -> IntArray:
    """Pairs in consecutive frames that have no other partner within the gate, either way."""
    from scipy.spatial import cKDTree

    apart = 4 * gate
    at = np.column_stack([sightings.x, sightings.y, apart * order])
    tree = cKDTree(at)
    shift = np.array([0, 0, apart])
    ahead, to = tree.query(at + shift, k=2, distance_upper_bound=gate)
    behind, _ = tree.query(at - shift, k=2, distance_upper_bound=gate)
    one = np.isfinite(ahead[:, 0]) & ~np.isfinite(ahead[:, 1])
    rows = np.flatnonzero(one)
    partner = to[rows, 0]
    rows, partner = rows[~np.isfinite(behind[partner, 1])], partner[~np.isfinite(behind[partner, 1])]
    return np.column_stack([rows, partner]).astype(np.int64)


def components(n: int, pairs: IntArray) -> IntArray:
    """Number of the connected component of each of n nodes."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    graph = coo_array((np.ones(len(pairs), np.int8), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    return np.asarray(connected_components(graph, directed=False)[1], np.int64)


def _tracks(sightings: Sightings, piece: IntArray, least: int) -> Tracks:
    """Pieces that last, numbered by first frame."""
    count = np.bincount(piece)
    kept = (count >= least) & ~_flecks(sightings, piece)
    rows = np.flatnonzero(kept[piece])
    rows = rows[np.lexsort((sightings.frame[rows], piece[rows]))]
    names, first, number = np.unique(piece[rows], return_index=True, return_inverse=True)
    rank = np.empty(len(names), np.int64)
    rank[np.lexsort((first, sightings.frame[rows[first]]))] = np.arange(len(names))
    droplet = rank[number]
    order = np.argsort(droplet, kind="stable")
    return Tracks(droplet[order], sightings.take(rows[order]))


def _flecks(sightings: Sightings, piece: IntArray) -> NDArray[np.bool_]:
    """Which pieces are flecks of noise or what a codec leaves behind.

    A droplet is seen in most frames of its life. What is near the threshold must also be seen in half of the frames
    from its first to its last, and move from frame to frame as droplets do; next to far brighter droplets it may be
    noise that a codec carries on from picture to picture.
    """
    count = np.bincount(piece)
    order = np.lexsort((sightings.frame, piece))
    number, frame = piece[order], sightings.frame[order]
    same = np.diff(number) == 0
    owner = number[1:][same]
    steps = np.diff(frame)[same]
    often = np.bincount(owner, steps <= _STEADY, len(count)) >= 0.5 * (count - 1)
    span = np.bincount(owner, steps, len(count)) + 1
    way = np.hypot(np.diff(sightings.x[order]), np.diff(sightings.y[order]))[same]
    next_to = steps == 1
    root = np.bincount(owner[next_to], np.sqrt(way[next_to]), len(count)) / np.maximum(
        np.bincount(owner[next_to], minlength=len(count)), 1
    )  # mean root of the way: a robust measure of its size
    brightness = np.bincount(piece, sightings.brightness, len(count)) / count
    faint = brightness < _FAINT * np.quantile(sightings.brightness, 0.01)
    clearness = np.bincount(piece, sightings.width / sightings.x_std, len(count)) / count
    faint &= clearness < _WEAK
    clear = sightings.brightness[sightings.width >= _WEAK * sightings.x_std]
    dim = (clearness < _NOISE) & (brightness < (_DIM * np.median(clear) if len(clear) else 0.0))
    usual = np.median(np.sqrt(way[next_to])) if next_to.any() else 0.0
    noise = np.sqrt(2 * float(np.median(sightings.x_std)))
    resting = (root < _RESTING * usual) & (usual > noise)
    return np.asarray(~often | dim | (faint & ((count < 0.5 * span) | resting)))
