"""Pieces of tracks joined by maximum likelihood over gaps, crossings, exits and re-entries."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, Sightings
from tracker.seeing.clocks import Clocks

IntArray = NDArray[np.int64]

_ROUNDS = ((0.0, 3), (0.4, 8), (1.5, 30), (8.0, 60))  # longest gap: seconds, and frames at least
_KNOWN_STEPS, _BLIND_STEPS = 400, 10  # steps near its end that tell a piece's velocity, field known or not
_VELOCITY_FLOOR = 0.04  # relative change of velocity that is no surprise: evaporation, drift of air
_BRIGHTNESS_FLOOR = 0.12  # spread of log brightness that is no surprise
_WORST_BRIGHTNESS, _WORST_VELOCITY = -20.0, -12.0  # log likelihood ratios: rare changes happen
_SURPRISE = 0.02  # share of joins at which the velocity is not the one foretold
_MAX_PAIRS = 3_000_000


@dataclass(frozen=True, slots=True)
class Motion:
    """What the recording tells of all its droplets' motion, per axis."""

    diffusion: float  # px^2/s
    noise: float  # px^2, variance of a place
    mean: FloatArray  # (states, 2) px/s
    variance: FloatArray  # (states, 2) px^2/s^2, between droplets
    log_brightness_variance: float


@dataclass(frozen=True, slots=True)
class Pieces:
    """Pieces ordered by number; velocities near either end."""

    first: IntArray  # (M,) rows of the sightings
    last: IntArray
    count: IntArray
    velocity: tuple[FloatArray, FloatArray]  # at start and end, (M, states, 2) px/s
    duration: tuple[FloatArray, FloatArray]  # (M, states) s that the velocity rests on
    brightness: tuple[FloatArray, FloatArray]  # (M,) mean log at start and end
    brightness_variance: tuple[FloatArray, FloatArray]


def join_pieces(
    sightings: Sightings, piece: IntArray, clocks: Clocks, *, box: tuple[int, int], cuts: IntArray
) -> IntArray:
    """Join pieces in rounds of growing gaps.

    Parameters
    ----------
    sightings : Sightings
        Ordered by frame.
    piece : ndarray of shape (N,)
        Number of the piece of each sighting.
    clocks : Clocks
        Times at each voltage.
    box : tuple of int
        Width and height of the picture in px.
    cuts : ndarray
        Frames before which no join may start.

    Returns
    -------
    piece : ndarray of shape (N,)
        Fewer pieces, numbered from 0.
    """
    interval = float(np.median(np.diff(clocks.times))) if len(clocks.times) > 1 else 1.0
    for seconds, frames in _ROUNDS:
        gap = max(seconds, frames * interval)
        pieces, motion = describe(sightings, piece, clocks)
        a, b = _pairs(sightings, pieces, clocks, gap, cuts)
        if len(a) == 0:
            continue
        births = len(pieces.first) / (len(clocks.times) * box[0] * box[1])
        gain = likelihood_ratio(sightings, pieces, motion, clocks, (a, b))
        gain += np.log(interval / gap) - np.log(births)
        a, b = best_joins(a[gain > 0], b[gain > 0], gain[gain > 0])
        piece = _merge(piece, len(pieces.first), a, b)
    return piece


def describe(sightings: Sightings, piece: IntArray, clocks: Clocks) -> tuple[Pieces, Motion]:
    """Velocities, brightness and ends of all pieces, and what they have in common."""
    order = np.lexsort((sightings.frame, piece))
    number = piece[order]
    count = np.bincount(number)
    begin = np.concatenate([[0], np.cumsum(count)[:-1]])
    rank = np.arange(len(order)) - begin[number]
    left = count[number] - 1 - rank
    same = np.flatnonzero(np.diff(number) == 0)
    a, b = order[same], order[same + 1]
    way = np.column_stack([sightings.x[b] - sightings.x[a], sightings.y[b] - sightings.y[a]])
    spent = clocks.elapsed[sightings.frame[b]] - clocks.elapsed[sightings.frame[a]]
    pure = _pure_state(spent, clocks, sightings.frame[a], sightings.frame[b])
    steps = _KNOWN_STEPS if clocks.known else _BLIND_STEPS
    shape = (len(count), clocks.states)
    velocity, duration = [], []
    for distance in (rank[same], left[same + 1]):
        use = (distance < steps) & (pure >= 0)
        v, t = _velocities(way[use], spent[use], number[same][use] * shape[1] + pure[use], shape)
        velocity.append(v)
        duration.append(t)
    bright, spread, common = _brightness(
        np.log(np.maximum(sightings.brightness, 1e-9))[order], number, rank, left
    )
    pieces = Pieces(
        order[begin], order[begin + count - 1], count, (velocity[0], velocity[1]), (duration[0], duration[1]),
        bright, spread,
    )  # fmt: skip
    noise = float(np.median(sightings.x_std**2 + sightings.y_std**2)) / 2
    use = pure >= 0
    where = number[same][use], pure[use]
    rest = way[use] - velocity[1][where] * spent[use, pure[use]][:, None]
    diffusion = _diffusion(rest, spent[use].sum(1), noise)
    return pieces, Motion(diffusion, noise, *_population(pieces, clocks), common)


def _pure_state(spent: FloatArray, clocks: Clocks, a: IntArray, b: IntArray) -> IntArray:
    """State of each step that lies in one; -1 where it changes or may change."""
    state = spent.argmax(1)
    total = np.maximum(spent.sum(1), 1e-12)
    pure = spent[np.arange(len(spent)), state] > 0.98 * total
    if clocks.known:
        low = np.searchsorted(clocks.toggles, clocks.times[a] - clocks.slack / 3)
        pure &= np.searchsorted(clocks.toggles, clocks.times[b] + clocks.slack / 3) == low
    return np.where(pure, state, -1)


def _velocities(
    way: FloatArray, spent: FloatArray, key: IntArray, shape: tuple[int, int]
) -> tuple[FloatArray, FloatArray]:
    """Way over time in each state of each piece, and that time."""
    size = shape[0] * shape[1]
    time: FloatArray = np.bincount(key, spent.sum(1), size).astype(np.float64)
    sums = np.stack([np.bincount(key, way[:, i], size) for i in range(2)], 1)
    velocity = sums / np.maximum(time, 1e-12)[:, None]
    return velocity.reshape(*shape, 2), time.reshape(shape)


def _brightness(
    log: FloatArray, number: IntArray, rank: IntArray, left: IntArray
) -> tuple[tuple[FloatArray, FloatArray], tuple[FloatArray, FloatArray], float]:
    """Mean log brightness of the ten sightings at either end, its variance, and the variance between pieces."""
    means, variances = [], []
    count = np.bincount(number)
    inner = np.diff(log)[np.diff(number) == 0]
    single = float(np.median(np.abs(inner)) / 0.6745) ** 2 / 2 if len(inner) else 0.01
    for distance in (rank, left):
        use = distance < 10
        n = np.bincount(number[use], minlength=len(count))
        means.append(np.bincount(number[use], log[use], len(count)) / n)
        variances.append(single / n)
    long = count >= min(10, int(count.max()))
    common = float(np.var(means[0][long])) if long.sum() > 3 else 0.1
    return (means[0], means[1]), (variances[0], variances[1]), max(common, 0.02)


def _diffusion(rest: FloatArray, time: FloatArray, noise: float) -> float:
    """Pooled diffusion from what steps leave after their piece's velocity, robustly."""
    if len(rest) < 30:
        return 30.0  # px^2/s: about three times that of a droplet of 0.5 um at 2 um/px
    variance = float(np.median(rest**2)) / 0.4549
    return max(
        (variance - 2 * noise) / (2 * float(np.median(time))), 0.02 * variance / float(np.median(time))
    )


def _population(pieces: Pieces, clocks: Clocks) -> tuple[FloatArray, FloatArray]:
    """Mean and variance of velocity between droplets, in each state and axis."""
    mean, variance = np.zeros((clocks.states, 2)), np.zeros((clocks.states, 2))
    for s in range(clocks.states):
        time = np.minimum(pieces.duration[1][:, s], 4.0)
        use = time > 0.3 * time.max(initial=0)
        if use.sum() < 3 or time.max(initial=0) <= 0:
            mean[s], variance[s] = 0.0, 100.0**2
            continue
        v, w = pieces.velocity[1][use, s], time[use, None]
        mean[s] = (w * v).sum(0) / w.sum()
        variance[s] = 1.5 * (w * (v - mean[s]) ** 2).sum(0) / w.sum() + 1.0
    return mean, variance


def _pairs(
    sightings: Sightings, pieces: Pieces, clocks: Clocks, gap: float, cuts: IntArray
) -> tuple[IntArray, IntArray]:
    """Ends and starts with at most `gap` seconds between."""
    end, start = sightings.frame[pieces.last], sightings.frame[pieces.first]
    order = np.argsort(start, kind="stable")
    ordered = start[order]
    low = np.searchsorted(ordered, end, side="right")
    until = np.searchsorted(clocks.times, clocks.times[end] + gap + 1e-9, side="right") - 1
    barrier = np.concatenate([cuts, [len(clocks.times)]])
    until = np.minimum(until, barrier[np.searchsorted(barrier, end, side="right")] - 1)
    many = np.maximum(np.searchsorted(ordered, until, side="right") - low, 0)
    if many.sum() > _MAX_PAIRS:
        many = np.minimum(many, max(1, _MAX_PAIRS // len(many)))
    a = np.repeat(np.arange(len(end)), many)
    offset = np.arange(len(a)) - np.repeat(np.cumsum(many) - many, many)
    return a, order[np.repeat(low, many) + offset]


def likelihood_ratio(
    sightings: Sightings, pieces: Pieces, motion: Motion, clocks: Clocks, pair: tuple[IntArray, IntArray]
) -> FloatArray:
    """Log likelihood of "one droplet" per px^2 of the start's place, plus the ratios of velocity and brightness.

    Parameters
    ----------
    sightings, pieces, motion, clocks
        As `describe` gives them.
    pair : tuple of two arrays of shape (P,)
        Pieces that end, pieces that start later.

    Returns
    -------
    ratio : ndarray of shape (P,)
        The caller adds the prior of the gap and takes off the log density of unrelated starts.
    """
    a, b = pair
    i, j = pieces.last[a], pieces.first[b]
    way = np.column_stack([sightings.x[j] - sightings.x[i], sightings.y[j] - sightings.y[i]])
    first, last = sightings.frame[i], sightings.frame[j]
    spent = clocks.elapsed[last] - clocks.elapsed[first]
    time = spent.sum(1)
    va, ta = pieces.velocity[1][a], pieces.duration[1][a]
    vb, tb = pieces.velocity[0][b], pieces.duration[0][b]
    sa, sb = _velocity_variance(va, ta, motion), _velocity_variance(vb, tb, motion)
    precision = 1 / sa + 1 / sb + 1 / motion.variance
    foretold = (va / sa + vb / sb + motion.mean / motion.variance) / precision
    common = 2 * motion.diffusion * 1.3 * time + 2 * motion.noise + 0.01
    variance = (spent[:, :, None] ** 2 / precision).sum(1) + common[:, None]
    swing = np.ptp(motion.mean, axis=0) ** 2 + motion.variance.sum(0)
    late = clocks.open(first, last) * (clocks.slack / 3) ** 2
    variance += late[:, None] * swing
    way_rest = way - (spent[:, :, None] * foretold).sum(1)
    fits = _log_normal(way_rest, variance)
    wide = variance + (spent[:, :, None] ** 2 * motion.variance).sum(1)
    loose = _log_normal(way - (spent[:, :, None] * motion.mean).sum(1), wide)
    surprise = _SURPRISE if clocks.known else 5 * _SURPRISE
    ratio: FloatArray = np.logaddexp(np.log1p(-surprise) + fits, np.log(surprise) + loose)
    ratio += _velocity_match(va - vb, sa + sb, motion, (ta > 0) & (tb > 0), clocks.known)
    return ratio + _brightness_match(pieces, motion, a, b)


def _velocity_variance(velocity: FloatArray, time: FloatArray, motion: Motion) -> FloatArray:
    """Variance of a piece's velocity in each state and axis; 1e12 where the state was not visited."""
    seen = np.maximum(time, 1e-12)
    own = 2 * motion.diffusion / seen + 2 * motion.noise / seen**2
    variance = own[..., None] + (_VELOCITY_FLOOR * velocity) ** 2 + 0.1
    return np.where(time[..., None] > 0, variance, 1e12)


def _log_normal(rest: FloatArray, variance: FloatArray) -> FloatArray:
    """Log density of a normal distribution in the plane with independent axes."""
    return np.asarray((-0.5 * rest**2 / variance - 0.5 * np.log(2 * np.pi * variance)).sum(-1))


def _velocity_match(
    difference: FloatArray, variance: FloatArray, motion: Motion, both: NDArray[np.bool_], known: bool
) -> FloatArray:
    """Log ratio of two pieces' velocities being one against being any two of the population."""
    wide = variance + 2 * motion.variance
    one = -0.5 * difference**2 / variance - 0.5 * np.log(variance)
    two = -0.5 * difference**2 / wide - 0.5 * np.log(wide)
    total = np.where(both[..., None], one - two, 0).sum((1, 2))
    return np.asarray(np.maximum(total, _WORST_VELOCITY if known else _WORST_VELOCITY / 6))


def _brightness_match(pieces: Pieces, motion: Motion, a: IntArray, b: IntArray) -> FloatArray:
    """Log ratio of two pieces' brightness being one against being any two of the population."""
    difference = pieces.brightness[1][a] - pieces.brightness[0][b]
    variance = pieces.brightness_variance[1][a] + pieces.brightness_variance[0][b] + _BRIGHTNESS_FLOOR**2
    wide = variance + 2 * motion.log_brightness_variance
    one = -0.5 * difference**2 / variance - 0.5 * np.log(variance)
    two = -0.5 * difference**2 / wide - 0.5 * np.log(wide)
    return np.asarray(np.maximum(one - two, _WORST_BRIGHTNESS))


def best_joins(a: IntArray, b: IntArray, gain: FloatArray) -> tuple[IntArray, IntArray]:
    """Pairs, each end and each start at most once, of the largest total gain.

    Parameters
    ----------
    a, b : ndarray of shape (P,)
        Pieces that end and that start.
    gain : ndarray of shape (P,)
        Each > 0.

    Returns
    -------
    a, b : ndarray
        The chosen pairs.

    Notes
    -----
    Every end may also stay alone, at gain 0: one dummy start each makes the sparse assignment complete.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import min_weight_full_bipartite_matching

    if len(a) == 0:
        return a, b
    ends, i = np.unique(a, return_inverse=True)
    starts, j = np.unique(b, return_inverse=True)
    top = float(gain.max()) + 1
    rows = np.concatenate([i, np.arange(len(ends))])
    columns = np.concatenate([j, len(starts) + np.arange(len(ends))])
    cost = np.concatenate([top - gain, np.full(len(ends), top)])
    graph = coo_array((cost, (rows, columns)), shape=(len(ends), len(starts) + len(ends))).tocsr()
    row, column = min_weight_full_bipartite_matching(graph)
    chosen = column < len(starts)
    return ends[row[chosen]], starts[column[chosen]]


def _merge(piece: IntArray, count: int, a: IntArray, b: IntArray) -> IntArray:
    """Numbers of the pieces after joining a to b."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    graph = coo_array((np.ones(len(a), np.int8), (a, b)), shape=(count, count))
    joined = connected_components(graph, directed=False)[1]
    return np.asarray(joined[piece], np.int64)
