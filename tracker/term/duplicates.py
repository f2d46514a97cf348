"""Results of one and the same recording: which of them counts."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from tracker.keeping.store import PROVENANCE, Result


@dataclass(frozen=True, slots=True)
class Duplicate:
    """A result that does not count, since another one of the same recording does."""

    left_out: int  # place in the sequence that was looked at
    counts: int  # place of the result that counts instead
    sentence: str


def result_name(result: Result) -> str:
    """Name a result for people.

    Parameters
    ----------
    result : Result
        Read or just made.

    Returns
    -------
    name : str
        Its folder, else its recording.
    """
    return str(result.folder) if result.folder is not None else str(result.recording.get("file", "result"))


def duplicates(results: Sequence[Result], names: Sequence[str] | None = None) -> list[Duplicate]:
    """Find results of one recording, told by its hash, and choose the one that counts.

    Parameters
    ----------
    results : sequence of Result
        Their tracks are not needed.
    names : sequence of str, optional
        As the sentences call them; None: by their folders.

    Returns
    -------
    found : list of Duplicate
        Those left out, in order: of each recording the result with more kept droplets counts, then the newer one.
    """
    called = [result_name(result) for result in results] if names is None else names
    groups: dict[str, list[int]] = {}
    for place, result in enumerate(results):
        digest = str(result.recording.get("sha256", ""))
        groups.setdefault(digest or f"no hash, result {place}", []).append(place)
    found = []
    for places in groups.values():
        best = max(places, key=lambda place: (_kept(results[place]), _written(results[place]), -place))
        found += [_duplicate(results, place, best, called[best]) for place in places if place != best]
    return sorted(found, key=lambda one: one.left_out)


def _duplicate(results: Sequence[Result], place: int, best: int, name: str) -> Duplicate:
    """Say which of two results of one recording counts, and by what."""
    mine, other = _kept(results[place]), _kept(results[best])
    why = (
        f"{other} kept droplets instead of {mine}"
        if other > mine
        else "as many kept droplets, and newer or named first"
    )
    return Duplicate(place, best, f"the same recording as {name}, which counts ({why})")


def _kept(result: Result) -> int:
    return int((result.droplets["verdict"] == "keep").sum())


def _written(result: Result) -> int:
    """When the result was written, in ns; 0 if it is not on a disk."""
    try:
        return (result.folder / PROVENANCE).stat().st_mtime_ns if result.folder is not None else 0
    except OSError:
        return 0
