"""What the page can open: results under the folders that were named on the command line, each by a number of ours.

The page never sends a path: it sends the key of an entry that this module found itself.
"""

from __future__ import annotations

import csv
import hashlib
import json
import os
import time
from collections import Counter
from dataclasses import dataclass, field
from itertools import islice
from pathlib import Path
from typing import Any

from tracker.errors import ResultError
from tracker.keeping.store import DECISIONS, PROVENANCE, SUFFIX, result_folder
from tracker.page.errors import RefusedError
from tracker.page.picturefolders import ENDINGS, FEWEST
from tracker.page.uploads import KINDS
from tracker.page.words import unit_words

MAX_ENTRIES = 5000
SCAN_AGE = 2.0  # s for which a walk through the folders is believed
PATIENCE = 0.25  # s that one request may spend on summaries
MOST_TRACKS = 6  # tracks of one recording in the list of the worst
_WEIGHT = {"keep": 0.0, "doubt": 1.0, "reject": 2.0}


@dataclass(frozen=True, slots=True)
class Entry:
    """One line of the shelf."""

    key: str
    name: str  # path below the folder that was named, without the ending
    folder: Path  # the result folder, or the recording that has none
    status: str  # done, failed, or open for a recording without a result
    why: str = ""


@dataclass(slots=True)
class Library:
    """Results under the target of `fallrise inspect`, and under the folder for new ones.

    Parameters
    ----------
    target : Path or None
        A result folder, a folder above results, or nothing.
    results : Path
        Where new results go.
    """

    target: Path | None
    results: Path
    _entries: dict[str, Entry] = field(default_factory=dict)
    _scanned: float = 0.0
    _summaries: dict[str, tuple[int, dict[str, Any]]] = field(default_factory=dict)

    def entries(self, *, fresh: bool = False) -> list[Entry]:
        """Give all entries, ordered by name; `fresh` walks the folders now."""
        if fresh or time.monotonic() - self._scanned > SCAN_AGE:
            found = {entry.key: entry for entry in self._walk()}
            self._entries, self._scanned = found, time.monotonic()
        return sorted(self._entries.values(), key=lambda entry: entry.name)

    def folder(self, key: str) -> Path:
        """Give the result folder of an entry; refuses (404) what is not on the shelf."""
        entry = self._entries.get(key)
        if entry is None:
            entry = {found.key: found for found in self.entries(fresh=True)}.get(key)
        if entry is None or entry.status != "done":
            raise RefusedError(404, "there is no such recording on the shelf")
        if not entry.folder.is_dir():
            raise RefusedError(404, f"the result folder of {entry.name} is gone")
        return entry.folder

    def recording(self, key: str) -> Path:
        """Give a recording without a result; refuses (404) what is not on the shelf."""
        entry = {found.key: found for found in self.entries(fresh=True)}.get(key)
        if entry is None or entry.status != "open":
            raise RefusedError(404, "there is no such recording without a result on the shelf")
        return entry.folder

    def name(self, key: str) -> str:
        """Name of an entry for a person."""
        return self._entries[key].name if key in self._entries else key

    def _walk(self) -> list[Entry]:
        if self.target is not None and is_result(self.target):
            found = [_entry(self.target, self.target.parent)]
        else:
            found = [] if self.target is None else _results_below(self.target)
            found += [] if self.target is None else _failures(self.target, {entry.name for entry in found})
        known = {entry.key for entry in found}
        if self.results.is_dir() and self.results != self.target:
            found += [entry for entry in _results_below(self.results) if entry.key not in known]
        if self.results.is_dir():
            found += _unmeasured(self.results, found)
        return found[:MAX_ENTRIES]

    def shown(self) -> list[dict[str, Any]]:
        """Give what the page lists; entries that could not be read in time say ``unread`` and come next time."""
        until = time.monotonic() + PATIENCE
        return [self._shown(entry, until) for entry in self.entries()]

    def _shown(self, entry: Entry, until: float) -> dict[str, Any]:
        common = {"id": entry.key, "name": entry.name, "status": entry.status, "why": entry.why, "bad": 0.0,
                  "when": 0.0, "worst": None}  # fmt: skip
        if entry.status != "done":
            return common
        try:
            moment = (entry.folder / PROVENANCE).stat().st_mtime_ns
            held = self._summaries.get(entry.key)
            if held is None or held[0] != moment:
                if time.monotonic() > until:
                    return {**common, "status": "unread", "why": "being read"}
                held = (moment, summary(entry.folder))
                self._summaries[entry.key] = held
        except (OSError, ValueError, KeyError, ResultError) as error:
            return {**common, "status": "failed", "why": f"the result cannot be read: {error}"}
        return {**common, **held[1], "when": moment / 1e9}


def key_of(folder: Path) -> str:
    """Key of a result folder in addresses of the page."""
    return hashlib.blake2s(
        str(folder.resolve()).encode("utf-8", "surrogateescape"), digest_size=8
    ).hexdigest()


def revision_of(folder: Path) -> str:
    """State of a result and its decisions; every change of either gives another one."""
    marks = []
    for name in (PROVENANCE, DECISIONS):
        try:
            state = (folder / name).stat()
            marks.append((state.st_ino, state.st_mtime_ns, state.st_size))
        except FileNotFoundError:
            marks.append((0, 0, 0))
    return hashlib.blake2s(repr(marks).encode(), digest_size=8).hexdigest()


def summary(folder: Path) -> dict[str, Any]:
    """Count the droplets of one result by verdict and reason.

    Parameters
    ----------
    folder : Path
        A result folder.

    Returns
    -------
    counts : dict
        For the list of recordings; `bad` is the mean weight of the verdicts, 0 all kept to 1 all rejected.
    """
    with (folder / "droplets.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    with (folder / PROVENANCE).open(encoding="utf-8") as stream:
        provenance = json.load(stream)
    verdicts = Counter(row["verdict"] for row in rows)
    tracks: list[dict[str, Any]] = [
        {
            "droplet": int(row["droplet"]), "verdict": row["verdict"], "reasons": row["reasons"].split(),
            "score": _WEIGHT.get(row["verdict"], 2.0) + 0.1 * len(row["reasons"].split()),
        }
        for row in rows
    ]  # fmt: skip
    worst = sorted((t for t in tracks if t["verdict"] != "keep"), key=lambda t: -t["score"])
    return {
        "droplets": len(rows), "keep": verdicts["keep"], "doubt": verdicts["doubt"], "reject": verdicts["reject"],
        "reasons": Counter(code for t in tracks for code in t["reasons"]), "tracks": worst[:MOST_TRACKS],
        "worst": worst[0]["droplet"] if worst else None,
        "bad": sum(_WEIGHT.get(t["verdict"], 2.0) for t in tracks) / (2 * len(tracks)) if tracks else 0.0,
        "unit": unit_words(provenance.get("charge_unit"), short=True),
    }  # fmt: skip


def is_result(folder: Path) -> bool:
    """Tell a result folder from others."""
    return (folder / PROVENANCE).is_file()


def _entry(folder: Path, root: Path) -> Entry:
    name = folder.relative_to(root).as_posix().removesuffix(SUFFIX)
    # A result that lies alone in a folder of its own name is called by it once.
    parts = name.split("/")
    if len(parts) > 1 and parts[-1] == parts[-2]:
        name = "/".join(parts[:-1])
    return Entry(key_of(folder), name, folder, "done")


def _results_below(root: Path) -> list[Entry]:
    found = []
    for here, folders, _ in os.walk(root):
        for name in sorted(folders):
            path = Path(here, name)
            if name.endswith(SUFFIX) and is_result(path):
                found.append(_entry(path, root))
        folders[:] = [
            name for name in sorted(folders) if not name.startswith(".") and not name.endswith(SUFFIX)
        ]
        if len(found) >= MAX_ENTRIES:
            break
    return found


def _failures(root: Path, known: set[str]) -> list[Entry]:
    """Recordings that a batch could not measure, by its own table."""
    try:
        with (root / "batch.csv").open(encoding="utf-8", newline="") as stream:
            rows = [row for row in csv.DictReader(stream) if row.get("status") == "failed"]
    except (OSError, ValueError):
        return []
    return [
        Entry(key_of(root / row["recording"]), row["recording"], root, "failed", row.get("reason", ""))
        for row in rows
        if row["recording"] not in known
    ]


def _is_recording(path: Path) -> bool:
    """Tell a video or a folder of pictures by its name and what lies in it."""
    if path.name.startswith(".") or path.name.endswith(SUFFIX):
        return False
    if not path.is_dir():
        return path.suffix.lower() in KINDS["recording"]
    with os.scandir(path) as inside:
        pictures = (file for file in inside if file.name.lower().endswith(ENDINGS))
        return next(islice(pictures, FEWEST - 1, None), None) is not None


def _unmeasured(root: Path, found: list[Entry]) -> list[Entry]:
    """Recordings in folders of the page that have no result beside them."""
    measured = {entry.folder for entry in found}
    made = []
    for folder in sorted(path for path in root.iterdir() if path.is_dir() and not path.name.startswith(".")):
        for path in sorted(folder.iterdir()):
            if _is_recording(path) and result_folder(path) not in measured:
                made.append(Entry(key_of(path), f"{folder.name}/{path.name}", path, "open", "not measured"))
    return made
