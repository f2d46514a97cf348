"""A person's decisions brought onto tracks: found again by place and time, then split, trimmed, joined or judged."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tracker.records import Decision, FloatArray, IntArray, Recording, Tracks

NEAR = 6.0  # px: a track that passes nearer at a sample's time is the same
LEAST_MATCHED = 0.6  # of the samples within a track's time
Place = tuple[tuple[float, float, float], ...]


@dataclass(frozen=True, slots=True)
class Decided:
    """Tracks after a person's decisions."""

    tracks: Tracks
    linked: IntArray  # (N,) droplet number that the linker gave each row; decisions always start from it
    trimmed: np.ndarray  # (N,) bool: rows that a person left out
    verdicts: dict[int, tuple[str, str]]  # droplet -> verdict and reason of a person
    warnings: tuple[str, ...]


def apply_decisions(tracks: Tracks, recording: Recording, decisions: Sequence[Decision]) -> Decided:
    """Split, trim and join tracks as a person decided, and find the droplets that verdicts are for.

    Parameters
    ----------
    tracks : Tracks
        As linked.
    recording : Recording
        Frame times.
    decisions : sequence of Decision
        In the order in which they were made.

    Returns
    -------
    decided : Decided
        A split gives the later part a new number; a join gives both the number of the first. A decision that
        no longer finds its track, or can no longer be carried out, is told.
    """
    times = recording.frame_times[tracks.sightings.frame]
    number = tracks.droplet.copy()
    trimmed = np.zeros(len(tracks), bool)
    verdicts: dict[int, tuple[str, str]] = {}
    told = []
    where = _Places(tracks, times, 0.75 * recording.frame_interval)
    kept = [decision for decision in effective(decisions) if decision.verdict not in ("reset", "undo")]
    for decision in sorted(kept, key=lambda d: d.verdict in _JUDGEMENTS):
        found = where.matching(decision.place, number)
        if not found:
            told.append(_lost(decision))
        elif decision.verdict in _JUDGEMENTS:
            verdicts.update(dict.fromkeys(found, (decision.verdict, decision.reason)))
        elif decision.verdict == "trim":
            low = -np.inf if decision.start is None else decision.start
            high = np.inf if decision.end is None else decision.end
            trimmed |= np.isin(number, found) & ((times < low) | (times > high))
        elif decision.verdict == "split":
            told += _split(number, times, found, decision)
        else:
            told += _join(number, tracks, found, where.matching(decision.other_place, number), decision)
    return _ordered(tracks, number, trimmed, verdicts, tuple(told))


_JUDGEMENTS = ("keep", "doubt", "reject")


def effective(decisions: Sequence[Decision]) -> list[Decision]:
    """Decisions that still hold after every undo and reset.

    Parameters
    ----------
    decisions : sequence of Decision
        In the order in which they were made.

    Returns
    -------
    decisions : list of Decision
        An undo takes away the last decision on the same track, a reset all of them. Tracks are the same if
        their samples lie on one another where both have them.
    """
    standing: list[Decision] = []
    for decision in decisions:
        if decision.verdict not in ("undo", "reset"):
            standing.append(decision)
            continue
        same = [i for i, other in enumerate(standing) if _same_track(decision.place, other)]
        gone = same if decision.verdict == "reset" else same[-1:]
        standing = [other for i, other in enumerate(standing) if i not in gone]
    return standing


def _same_track(place: Place, other: Decision) -> bool:
    """Whether samples lie on the track, or one of the two joined tracks, of another decision."""
    return any(
        _overlap(place, samples) or _overlap(samples, place) for samples in (other.place, other.other_place)
    )


def _overlap(samples: Place, onto: Place) -> bool:
    """Whether samples within the time of other samples lie near the line through those."""
    if not samples or not onto:
        return False
    points, line = np.array(samples), np.array(onto)
    inside = (points[:, 0] >= line[0, 0] - 1e-6) & (points[:, 0] <= line[-1, 0] + 1e-6)
    if not np.any(inside):
        return False
    there = np.column_stack([np.interp(points[inside, 0], line[:, 0], line[:, i]) for i in (1, 2)])
    # Between samples a track bends at toggles: compare with how far neighbouring samples are apart.
    reach = NEAR + (0.5 * np.max(np.hypot(*np.diff(line[:, 1:], axis=0).T)) if len(line) > 1 else 0.0)
    return bool(np.mean(np.hypot(*(there - points[inside, 1:]).T) < reach) >= LEAST_MATCHED)


class _Places:
    """Finds the droplets whose tracks pass through samples."""

    def __init__(self, tracks: Tracks, times: FloatArray, tolerance: float) -> None:
        self.tracks, self.times, self.tolerance = tracks, times, tolerance

    def matching(self, place: Place, number: IntArray) -> list[int]:
        """Droplets on whose track most of the samples within its time lie, best first."""
        if not place:
            return []
        sightings, scores = self.tracks.sightings, []
        samples = np.array(place)
        for droplet in np.unique(number):
            rows = np.flatnonzero(number == droplet)
            rows = rows[np.argsort(self.times[rows])]
            t = self.times[rows]
            inside = (samples[:, 0] >= t[0] - self.tolerance) & (samples[:, 0] <= t[-1] + self.tolerance)
            if not np.any(inside):
                continue
            at = rows[np.clip(np.searchsorted(t, samples[inside, 0] - self.tolerance), 0, len(t) - 1)]
            apart = np.hypot(sightings.x[at] - samples[inside, 1], sightings.y[at] - samples[inside, 2])
            close = np.abs(self.times[at] - samples[inside, 0]) <= self.tolerance
            seen = int(np.sum(close))
            hits = int(np.sum(close & (apart < NEAR)))
            if seen and hits >= LEAST_MATCHED * seen and hits >= min(2, len(place)):
                scores.append((-hits, int(droplet)))
        return [droplet for _, droplet in sorted(scores)]


def _lost(decision: Decision) -> str:
    said = f" ({decision.reason})" if decision.reason else ""
    what = f"the decision {decision.verdict!r} of {decision.time[:10]} on droplet {decision.droplet}{said}"
    return f"{what} no longer finds its track"


def _split(number: IntArray, times: FloatArray, found: list[int], decision: Decision) -> list[str]:
    """Give the later part of a track a new number."""
    moment = np.inf if decision.at is None else decision.at
    for droplet in found:
        later = (number == droplet) & (times >= moment)
        if np.any(later) and not np.all(later[number == droplet]):
            number[later] = number.max() + 1
            return []
    return [f"{_lost(decision)} at {moment:.3f} s"]


def _join(
    number: IntArray, tracks: Tracks, found: list[int], other: list[int], decision: Decision
) -> list[str]:
    """Give a second track the number of the first."""
    other = [droplet for droplet in other if droplet not in found[:1]]
    if not other:
        return [] if found and len(found) > 1 else [_lost(decision)]
    one, two = number == found[0], number == other[0]
    if np.intersect1d(tracks.sightings.frame[one], tracks.sightings.frame[two]).size:
        what = f"the join of {decision.time[:10]} of droplets {decision.droplet} and {decision.other}"
        return [f"{what} is not possible any more: both are seen in the same frames"]
    number[two] = found[0]
    return []


def _ordered(
    tracks: Tracks, number: IntArray, trimmed: np.ndarray, verdicts: dict[int, tuple[str, str]],
    warnings: tuple[str, ...],
) -> Decided:  # fmt: skip
    """Order rows by droplet and frame again."""
    order = np.lexsort((tracks.sightings.frame, number))
    changed = Tracks(number[order], tracks.sightings.take(order))
    return Decided(changed, tracks.droplet[order], trimmed[order], verdicts, warnings)
