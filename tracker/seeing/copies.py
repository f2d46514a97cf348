"""Doubt about places from the recording's own spots and steps: what the camera's noise does, and a codec beside it.

A compressed picture loses what lies below the quantiser. One that is predicted from others is a copy of them, moved by
motion vectors and mended where the difference exceeds the quantiser's dead zone. Two traces can be measured:

- Spots are out of shape by noise and by what was left out: how much width and slant vary, which the fit of a place
  leaves alone, tells both. As patterns in a picture they are nearly as coarse as a shift of the spot.
- A spot that was copied and not mended has moved by the motion vector, a multiple of a fixed step. Droplets diffuse by
  more than that, so that steps of free places have all phases against it alike.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, IntArray, Sightings
from tracker.seeing.background import spread_of

Kinds = NDArray[np.str_]  # (frames,) I: by itself, P: from pictures before, B: from both sides, or empty

_STEPS = (0.5, 0.25, 0.125)  # px, motion vectors of the codecs in use, coarsest first
_BROAD = 0.6  # steps of a vector: with more spread than that, phases of free places are even to exp(-7)
_CLEAR = 8.0  # spot width over the stated deviation: fainter ones may be flecks that the codec moves
_LASTING = 15  # sightings of a piece of a track that counts
_FEW = 60  # clear sightings of a kind of picture that tell
_BOUND = {
    "P": 1.5,
    "B": 2.0,
}  # variances of a place by its spot's shape: copies that are further off are mended
_PROOF = 4.0  # standard deviations of a mean cosine that are no chance


@dataclass(frozen=True, slots=True)
class Copying:
    """What was found for one kind of picture."""

    pictures: int
    sightings: int  # clear ones, from which it was found
    shape: float  # variance of the spots' shapes over the one stated
    shares: tuple[tuple[float, ...], ...]  # of copies for each step of a vector, from before, and after
    variance: float  # px^2 that copies add along each axis

    def as_dict(self) -> dict[str, Any]:
        """Give plain values for provenance."""
        shares = {
            f"copies_{side}": {f"{q:g} px": round(s, 4) for q, s in zip(_STEPS, found, strict=True)}
            for side, found in zip(("from_before", "from_after"), self.shares, strict=False)
        }
        return {
            "pictures": self.pictures, "sightings": self.sightings, "shape_variance": self.shape, **shares,
            "copies_std_px": self.variance**0.5,
        }  # fmt: skip


def mend_deviations(
    sightings: Sightings, *, strain: FloatArray, piece: IntArray, kinds: Kinds
) -> tuple[Sightings, dict[str, Any]]:
    """Scale standard deviations to what the spots show, and let them hold what copies add.

    Parameters
    ----------
    sightings : Sightings
        With the standard deviations that the noise gives which a few spots taught.
    strain : ndarray of shape (N, 3)
        What the fit's residual adds to the logarithms of the spot's widths along x and y and to its slant, in standard
        deviations that go with the stated ones of the place.
    piece : ndarray of shape (N,)
        Piece of a track of each.
    kinds : ndarray of shape (frames,)
        Kind of each picture; empty where it is coded without loss.

    Returns
    -------
    sightings : Sightings
        The same where there are too few clear ones.
    report : dict
        What was found for each kind of picture, and for those without loss.

    Notes
    -----
    A variance becomes shape * variance + min(v, r * shape * typical variance) with v = sum over steps q of the share
    of copies times q^2 / 12, the variance of rounding to q. A copy that is further off than the light that the codec
    leaves out elsewhere would be mended; hence the bound, whose r of 1.5 for pictures predicted from before and 2 for
    those from both sides was chosen on simulated H.264, VP9 and MPEG-4 recordings. Pictures predicted from both sides,
    which are quantised more coarsely, are not given less than those predicted from before: fewer of them may not prove
    it. Predicted pictures of a kind with too few sightings take what was found for the other kind; too few pictures
    coded by themselves among predicted ones, which are quantised more finely, take their shape if that is below 1.

    What neither trace shows is missing: HEVC's pictures that are interpolated over large blocks are off by up to twice
    the deviation stated, droplets near the threshold in predicted pictures by up to 1.4 times.

    References
    ----------
    .. [1] ITU-T Recommendation H.264, 8.4.2.2: prediction in steps of a quarter of a luma sample.
    .. [2] W. R. Bennett, Bell Syst. Tech. J. 27 (1948), 446-472: variance q^2 / 12 of rounding.
    """
    if len(sightings) == 0:
        return sightings, {}
    used, rows = kinds[sightings.frame], _clear(sightings, piece)
    strain = _less_means(strain, piece, rows)
    found = {k: f for k in ("", "I", "P", "B") if (f := _find(sightings, strain, piece, (k, kinds, rows)))}
    if "P" in found and "B" in found:
        found["B"] = replace(found["B"], variance=max(found["B"].variance, found["P"].variance))
    variance = np.stack([sightings.x_std**2, sightings.y_std**2])
    for kind, other in (("", ""), ("I", "P"), ("P", "B"), ("B", "P")):
        if near := found.get(kind) or found.get(other):
            at = used == kind
            own = kind in found or kind != "I"
            shape, added = (near.shape, near.variance) if own else (min(near.shape, 1.0), 0.0)
            variance[:, at] = shape * variance[:, at] + added
    x_std, y_std = np.sqrt(variance)
    return replace(sightings, x_std=x_std, y_std=y_std), {
        k or "lossless": f.as_dict() for k, f in found.items()
    }


def share_of_copies(steps: FloatArray, step: float) -> float:
    """Share of steps that are multiples of a vector's step, the others having all phases alike.

    Parameters
    ----------
    steps : ndarray of shape (n,)
        Steps of places in px.
    step : float
        Of the vector in px.

    Returns
    -------
    share : float
        Mean cosine of the phases; 0 where it is below four of its standard deviations by chance, 1 / sqrt(2 n).

    References
    ----------
    .. [1] N. I. Fisher, Statistical Analysis of Circular Data (1993), 4.3.1: test of uniformity against a stated
       mean direction.
    """
    if len(steps) == 0:
        return 0.0
    share = float(np.cos(2 * np.pi * steps / step).mean())
    return share if share > _PROOF / np.sqrt(2 * len(steps)) else 0.0


def _find(
    sightings: Sightings, strain: FloatArray, piece: IntArray, which: tuple[str, Kinds, NDArray[np.bool_]]
) -> Copying | None:
    """Shape, shares and variance of one kind of picture; None where there are too few sightings."""
    kind, kinds, clear = which
    rows = clear & (kinds[sightings.frame] == kind)
    if np.count_nonzero(rows) < _FEW:
        return None
    # motion within the exposure widens spots along its way and unevenly: of the widths the quieter one counts
    x, y, slant = (spread_of(strain[rows, i]) ** 2 for i in range(3))
    shape = 0.5 * (min(x, y) + slant)
    sides = _references(kinds)[: {"P": 1, "B": 2}.get(kind, 0)]
    shares = tuple(_shares(sightings, piece, rows, side) for side in sides)
    added = sum(_rounding(s) for s in shares)
    typical = shape * float(np.median(sightings.x_std[rows] ** 2))
    pictures, count = int(np.count_nonzero(kinds == kind)), int(np.count_nonzero(rows))
    return Copying(pictures, count, shape, shares, min(added, _BOUND.get(kind, 0.0) * typical))


def _clear(sightings: Sightings, piece: IntArray) -> NDArray[np.bool_]:
    """Which sightings are lone, clear ones of lasting pieces."""
    lasting = np.bincount(piece) >= _LASTING
    clear = (sightings.flags == 0) & (sightings.width > _CLEAR * sightings.x_std)
    return np.asarray(clear & lasting[piece])


def _less_means(strain: FloatArray, piece: IntArray, rows: NDArray[np.bool_]) -> FloatArray:
    """Strain less the mean over its piece's clear sightings: a droplet out of focus is wide by itself."""
    size = int(piece.max()) + 1
    count = np.maximum(np.bincount(piece[rows], minlength=size), 1)
    means = np.stack([np.bincount(piece[rows], column[rows], size) / count for column in strain.T], 1)
    return np.asarray(strain - means[piece])


def _references(kinds: Kinds) -> tuple[IntArray, IntArray]:
    """Frames that each may be a copy of, before and after; -1 for none. P pictures are not predicted from B."""
    frames = np.arange(len(kinds))
    last = np.maximum.accumulate(np.where(np.isin(kinds, ("I", "P")), frames, -1))
    before = np.concatenate([[-1], np.where(kinds[1:] == "P", last[:-1], frames[:-1])])
    return before.astype(np.int64), np.append(frames[1:], -1).astype(np.int64)


def _shares(
    sightings: Sightings, piece: IntArray, rows: NDArray[np.bool_], reference: IntArray
) -> tuple[float, ...]:
    """Share of copies for each step of a vector, both axes together."""
    row, partner = _partners(sightings, piece, reference)
    ways = np.concatenate([a[row] - a[partner] for a in (sightings.x, sightings.y)])
    spreads = np.concatenate([_spread_of_pieces(way, piece[row]) for way in np.split(ways, 2)])
    wanted = np.tile(rows[row], 2)
    return tuple(share_of_copies(ways[wanted & (spreads > _BROAD * q)], q) for q in _STEPS)


def _partners(sightings: Sightings, piece: IntArray, reference: IntArray) -> tuple[IntArray, IntArray]:
    """Sightings whose piece is seen in the reference picture too, and that other sighting."""
    base = len(reference) + 1
    key = piece * base + sightings.frame
    order = np.argsort(key)
    ordered = key[order]
    other = reference[sightings.frame]
    wanted = piece * base + other
    place = np.minimum(np.searchsorted(ordered, wanted), len(key) - 1)
    row = np.flatnonzero((other >= 0) & (ordered[place] == wanted))
    return row, order[place[row]]


def _spread_of_pieces(values: FloatArray, piece: IntArray) -> FloatArray:
    """Standard deviation of the values of each one's piece; 0 for pieces too short to tell."""
    _, number, count = np.unique(piece, return_inverse=True, return_counts=True)
    rest = values - (np.bincount(number, values) / count)[number]
    variance = np.bincount(number, rest**2) / np.maximum(count - 1, 1)
    return np.asarray(np.sqrt(np.where(count >= _LASTING, variance, 0))[number])


def _rounding(shares: tuple[float, ...]) -> float:
    """Variance in px^2 of rounding; multiples of a step are multiples of half of it too and count once."""
    total, before = 0.0, 0.0
    for step, share in zip(_STEPS, shares, strict=True):
        total += max(share - before, 0) * step**2 / 12
        before = max(before, share)
    return total
