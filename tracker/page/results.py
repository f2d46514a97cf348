"""One result as the page shows it: plain values, positions as numbers in one block, decisions with what they did."""

from __future__ import annotations

import threading
from collections import Counter, OrderedDict
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from physics.droplet import ELEMENTARY_CHARGE
from tracker.errors import ResultError
from tracker.keeping.decisions import read_decisions
from tracker.keeping.store import Result, read_result
from tracker.motion.analysis import Analysis, Memo
from tracker.motion.decided import effective
from tracker.page.library import Library, revision_of
from tracker.page.words import unit_words
from tracker.records import Decision

KEPT = 4  # results held in memory
OFF = 0.01  # of the largest voltage: what a log shows below it is an offset
NEAR = 6.0  # px within which a track is that of a decision
JUDGEMENTS = ("keep", "doubt", "reject")


@dataclass(slots=True)
class Keeper:
    """Fits of one result, kept from one evaluation to the next; the lock is held while they are worked out."""

    memo: Memo = field(default_factory=Memo)
    lock: threading.Lock = field(default_factory=threading.Lock)


@dataclass(slots=True)
class Opened:
    """A result in memory, with the state of its files when they were read."""

    key: str
    name: str
    folder: Path
    revision: str
    result: Result
    decisions: tuple[Decision, ...]
    keeper: Keeper
    analysis: Analysis | None = None  # fits for the plots, once they were asked for

    @property
    def recording(self) -> dict[str, Any]:
        """What recording.json holds."""
        return self.result.recording

    @property
    def hash(self) -> str:
        """Short hash of the recording: part of the addresses of its pictures, which browsers keep."""
        return str(self.recording.get("sha256") or "none")[:20]


@dataclass(slots=True)
class Results:
    """The results that are open, the latest few in memory; edits of one result wait for each other."""

    library: Library
    _held: OrderedDict[str, Opened] = field(default_factory=OrderedDict)
    _keepers: dict[str, Keeper] = field(default_factory=dict)
    _locks: dict[str, threading.Lock] = field(default_factory=dict)
    _guard: threading.Lock = field(default_factory=threading.Lock)

    def lock(self, key: str) -> threading.Lock:
        """Lock of one result: held while it is read or changed."""
        with self._guard:
            return self._locks.setdefault(key, threading.Lock())

    def open(self, key: str) -> Opened:
        """Give a result as its files are now; read again only if they changed."""
        folder = self.library.folder(key)
        with self.lock(key):
            return self.read(key, folder)

    def read(self, key: str, folder: Path) -> Opened:
        """Give a result; the caller holds its lock."""
        revision = revision_of(folder)
        held = self._held.get(key)
        if held is not None and held.revision == revision:
            self._held.move_to_end(key)
            return held
        return self._hold(key, folder, revision, read_result(folder))

    def hold(self, key: str, folder: Path, result: Result) -> Opened:
        """Take in a result that was just written; the caller holds its lock."""
        return self._hold(key, folder, revision_of(folder), result)

    def keeper(self, key: str) -> Keeper:
        """Kept fits of one result."""
        with self._guard:
            return self._keepers.setdefault(key, Keeper())

    def _hold(self, key: str, folder: Path, revision: str, result: Result) -> Opened:
        name, decisions = self.library.name(key), read_decisions(folder)
        opened = Opened(key, name, folder, revision, result, decisions, self.keeper(key))
        self._held[key] = opened
        while len(self._held) > KEPT:
            gone, _ = self._held.popitem(last=False)
            self._keepers.pop(gone, None)
        return opened


def shown(opened: Opened) -> dict[str, Any]:
    """Give all of a result but its positions.

    Parameters
    ----------
    opened : Opened

    Returns
    -------
    values : dict
        Plain values in SI, as the page's script reads them.

    Raises
    ------
    ResultError
        If the provenance lacks what the page needs.
    """
    recording = opened.recording
    try:
        frames = recording["frames"]
        values = {
            "width": int(frames["width_px"]), "height": int(frames["height_px"]),
            "times": [float(time) for time in recording["frame_times_s"]],
            "segments": field_segments(recording),
        }  # fmt: skip
    except (KeyError, TypeError, ValueError) as error:
        raise ResultError(
            str(opened.folder), f"is damaged ({error!r}); measure the recording again"
        ) from error
    unit = recording.get("charge_unit") or {}
    resolved = unit.get("charge_unit_c") if unit.get("resolved") else None
    return {
        **values, "id": opened.key, "name": opened.name, "folder": str(opened.folder), "revision": opened.revision,
        "file": str(recording.get("file", "")), "recording_hash": opened.hash,
        "droplets": droplets(opened), "warnings": [str(text) for text in recording.get("warnings", [])],
        "charge_unit": resolved or ELEMENTARY_CHARGE, "charge_unit_name": "unit" if resolved else "e",
        "charge_unit_text": unit_words(unit),
        "decisions": history(opened.decisions), "can_undo": bool(_standing(opened.decisions)),
    }  # fmt: skip


def field_segments(recording: dict[str, Any]) -> list[dict[str, float]]:
    """Give the field's segments; `way` is 0 where the field is off to what a supply's log can tell, else its sign.

    Parameters
    ----------
    recording : dict
        What recording.json holds.

    Returns
    -------
    segments : list of dict
        ``start``, ``end`` in s, ``voltage`` in V, ``way``.
    """
    stored = recording["field"]["segments"]
    largest = max((abs(s["voltage_v"]) for s in stored), default=0.0)
    return [
        {
            "start": s["start_s"], "end": s["end_s"], "voltage": s["voltage_v"],
            "way": 0 if abs(s["voltage_v"]) <= OFF * largest else int(np.sign(s["voltage_v"])),
        }
        for s in stored
    ]  # fmt: skip


def droplets(opened: Opened) -> list[dict[str, Any]]:
    """Give the rows of the droplet table; empty cells are None."""
    table = opened.result.droplets
    rows = []
    said, balances = _said(opened), _balances(opened.recording)
    for row in table.to_dict("records"):
        plain = {name: _plain(value) for name, value in row.items()}
        plain["reasons"] = str(plain["reasons"] or "").split()
        plain["by_hand"] = "decided" in plain["reasons"]
        plain |= balances.get(plain["droplet"], {})
        plain["decision"] = said.get(plain["droplet"], "") if plain["by_hand"] else ""
        rows.append(plain)
    return rows


def _balances(recording: dict[str, Any]) -> dict[int, dict[str, float]]:
    """Balance voltage of each droplet that was seen at rest with the field on, from all its segments."""
    told = (recording.get("details") or {}).get("balances") or ()
    return {
        int(b["droplet"]): {"balance_v": b["voltage_v"], "balance_std_v": b["voltage_std_v"]} for b in told
    }


def _said(opened: Opened) -> dict[int, str]:
    """What a person wrote, by the droplet that the decision is on now."""
    words = {}
    for decision in effective(opened.decisions):
        if decision.verdict in JUDGEMENTS:
            found = droplet_of(opened.result, decision)
            if found is not None:
                words[found] = f"\u201c{decision.reason}\u201d ({decision.time[:10]})"
    return words


def _plain(value: Any) -> Any:
    """Missing values as None, numbers as Python's own."""
    import pandas as pd

    if value is pd.NA or value is None or (isinstance(value, float) and not np.isfinite(value)):
        return None
    return value.item() if hasattr(value, "item") else value


def positions(result: Result) -> bytes:
    """Pack all positions: count, droplet, frame, x, y, used, each as one block.

    Parameters
    ----------
    result : Result
        With tracks ordered by droplet and frame.

    Returns
    -------
    block : bytes
        Little-endian: uint32 N, int32 droplet[N], int32 frame[N], float32 x[N], float32 y[N], uint8 used[N].
    """
    tracks = result.tracks
    parts = [np.array([len(tracks)], "<u4").tobytes()]
    kinds = {"droplet": "<i4", "frame": "<i4", "x_px": "<f4", "y_px": "<f4", "used": "u1"}
    parts += [tracks[name].to_numpy(kind).tobytes() for name, kind in kinds.items()]
    return b"".join(parts)


def history(decisions: tuple[Decision, ...]) -> list[dict[str, Any]]:
    """Give the decisions in words, those that were taken back marked."""
    standing = {id(decision) for decision in effective(decisions)}
    return [
        {
            "time": decision.time[:19].replace("T", " "), "what": _what(decision), "reason": decision.reason,
            "undone": decision.verdict not in ("undo", "reset") and id(decision) not in standing,
        }
        for decision in decisions
    ]  # fmt: skip


def _what(decision: Decision) -> str:
    n = decision.droplet
    if decision.verdict in JUDGEMENTS:
        return f"{decision.verdict} droplet {n}"
    if decision.verdict == "split":
        return f"split droplet {n} at {decision.at:.3f} s"
    if decision.verdict == "trim":
        low = "" if decision.start is None else f" from {decision.start:.3f} s"
        high = "" if decision.end is None else f" to {decision.end:.3f} s"
        return f"trim droplet {n}{low}{high}"
    if decision.verdict == "join":
        return f"join droplet {n} with {decision.other}"
    return f"set droplet {n} back" if decision.verdict == "reset" else f"undo the last on droplet {n}"


def _standing(decisions: tuple[Decision, ...]) -> list[Decision]:
    return effective(decisions)


def last_standing(opened: Opened) -> tuple[Decision, int] | None:
    """Give the last decision that holds, and the droplet on whose track it lies now; None if there is none."""
    for decision in reversed(effective(opened.decisions)):
        found = droplet_of(opened.result, decision)
        if found is not None:
            return decision, found
    return None


def droplet_of(result: Result, decision: Decision) -> int | None:
    """Find the droplet whose track passes through a decision's samples.

    Parameters
    ----------
    result : Result
        With its tracks.
    decision : Decision
        Carries (time in s, x in px, y in px) of its track.

    Returns
    -------
    droplet : int or None
        The one that most samples lie on; of two, the one that bears the decision's own number.
    """
    tracks = result.tracks
    time, x, y = (tracks[name].to_numpy(float) for name in ("time_s", "x_px", "y_px"))
    number = tracks["droplet"].to_numpy(np.int64)
    votes: Counter[int] = Counter()
    for moment, at_x, at_y in decision.place:
        near = (np.abs(time - moment) < 1e-4) & (np.hypot(x - at_x, y - at_y) < NEAR)
        votes.update(set(number[near].tolist()))
    if not votes:
        return None
    return decision.droplet if votes[decision.droplet] else votes.most_common(1)[0][0]
