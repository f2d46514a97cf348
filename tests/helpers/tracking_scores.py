"""Scores of tracks against the truth, as defined by Chenouard et al., Nature Methods 11 (2014) 281, supplement.

Tracks are dictionaries frame -> (x, y). The distance of two tracks is the sum over frames of min(distance, gate),
with the gate where one of them is missing. Tracks are paired with the truth by the least total distance, where a
true track may also stay without partner.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import linear_sum_assignment

Track = dict[int, tuple[float, float]]
GATE = 5.0  # px


@dataclass(frozen=True)
class Scores:
    """alpha and beta in 0..1, Jaccard similarity of points and of tracks, rms over matched points."""

    alpha: float
    beta: float
    jaccard: float
    jaccard_tracks: float
    rms: float


def track_distance(a: Track, b: Track, gate: float = GATE) -> float:
    """Gated distance of two tracks summed over all frames of either."""
    shared = a.keys() & b.keys()
    near = sum(min(math.dist(a[f], b[f]), gate) for f in shared)
    return near + gate * (len(a.keys() | b.keys()) - len(shared))


def score(truth: list[Track], found: list[Track], gate: float = GATE) -> Scores:
    """All scores of found tracks against true ones."""
    alone = np.array([gate * len(t) for t in truth])
    cost = np.array([[track_distance(t, f, gate) for f in found] for t in truth]).reshape(
        len(truth), len(found)
    )
    whole = np.hstack([cost, np.repeat(alone[:, None], len(truth), axis=1)])
    rows, columns = linear_sum_assignment(whole)
    total = float(whole[rows, columns].sum())
    paired = {int(r): int(c) for r, c in zip(rows, columns, strict=True) if c < len(found)}
    spare = [f for j, f in enumerate(found) if j not in paired.values()]
    errors = [
        math.dist(truth[i][k], found[j][k])
        for i, j in paired.items()
        for k in truth[i].keys() & found[j].keys()
    ]
    matched = [e for e in errors if e < gate]
    missed = sum(len(t) for t in truth) - len(matched)
    false = sum(len(f) for f in found) - len(matched)
    good = sum(1 for i, j in paired.items() if cost[i, j] < alone[i])
    least = float(alone.sum())
    return Scores(
        alpha=1 - total / least,
        beta=(least - total) / (least + gate * sum(len(f) for f in spare)),
        jaccard=len(matched) / (len(matched) + missed + false),
        jaccard_tracks=good / (len(truth) + len(found) - good),
        rms=math.sqrt(sum(e * e for e in matched) / len(matched)) if matched else math.nan,
    )


def as_tracks(number: np.ndarray, frame: np.ndarray, x: np.ndarray, y: np.ndarray) -> list[Track]:
    """Tracks from columns."""
    tracks: dict[int, Track] = {}
    for n, f, a, b in zip(number.tolist(), frame.tolist(), x.tolist(), y.tolist(), strict=True):
        tracks.setdefault(n, {})[f] = (a, b)
    return list(tracks.values())


def switches(number: np.ndarray, owner: np.ndarray) -> int:
    """Tracks of which more than 5 % of the owned points belong to another than the main owner; owner -1 is none."""
    count = 0
    for n in np.unique(number):
        mine = owner[(number == n) & (owner >= 0)]
        if len(mine):
            count += np.bincount(mine).max() < 0.95 * len(mine)
    return int(count)
