"""Which recordings of a term are done already, by content; and what killed batches left behind."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from dataclasses import replace
from pathlib import Path

from physics.errors import FallriseError
from tracker.bench import load_bench
from tracker.errors import ResultError
from tracker.keeping.store import PROVENANCE, read_provenance, read_result
from tracker.records import Settings
from tracker.term.ledger import Entry
from tracker.term.walk import Stamp, Task, content_hash, input_files, recording_date, stamp
from tracker.term.work import Outcome, current_version, done_outcome


def settings_key(settings: Settings) -> str:
    """Hash of settings and version: a result with another one is made again.

    Parameters
    ----------
    settings : Settings
        Of the batch.

    Returns
    -------
    key : str
        Hexadecimal.
    """
    text = json.dumps([settings.as_dict(), current_version()], sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()


def task_stamps(task: Task) -> tuple[Stamp, ...]:
    """Sizes and times of a recording and all files that its result depends on, the recording first.

    Parameters
    ----------
    task : Task
        The recording.

    Returns
    -------
    stamps : tuple of Stamp
        As they are now.
    """
    return tuple(stamp(path) for path in (task.recording, *input_files(task)))


def standing(
    task: Task, entry: Entry | None, stamps: tuple[Stamp, ...], key: str, *, retry: bool
) -> Entry | None:
    """Find out whether a recording is done with its present contents.

    Parameters
    ----------
    task : Task
        The recording.
    entry : Entry or None
        What the ledger says of it.
    stamps : tuple of Stamp
        Of its files now.
    key : str
        Of the batch's settings and version.
    retry : bool
        Failed recordings are to be tried again.

    Returns
    -------
    entry : Entry or None
        Up to date, for the ledger; None: it has to be measured.

    Notes
    -----
    Sizes and times that have not changed save the reading. Else contents decide: the recording's hash, and the
    digest of every value of bench, scale and log. A result that lies there without an entry is taken over if
    its provenance names the same contents, settings and version.
    """
    if entry is not None and entry.settings != key:
        entry = None
    if entry is not None and entry.status == "failed":
        if retry or entry.again:
            return None
        return _same_failure(entry, stamps)
    if entry is not None and entry.stamps == stamps and stamp(task.out / PROVENANCE)[1:] == entry.result:
        return entry
    return _same_result(task, entry, stamps, key)


def _same_failure(entry: Entry, stamps: tuple[Stamp, ...]) -> Entry | None:
    """A failure stands while every file has the contents it had."""
    if entry.stamps == stamps:
        return entry
    hashes = tuple(content_hash(Path(path)) for path, _, _ in stamps)
    return replace(entry, stamps=stamps) if hashes == entry.hashes else None


def _same_result(task: Task, entry: Entry | None, stamps: tuple[Stamp, ...], key: str) -> Entry | None:
    """A result stands if its own provenance names the present contents."""
    try:
        provenance = read_provenance(task.out)
        settings = {**provenance["settings"]}
        version = provenance["versions"]["fallrise"]
        frames = provenance["frames"]
        bench = load_bench(task.bench, recording=task.recording)
        digest = bench.fitted_to(frames["width_px"], frames["height_px"]).digest
    except (FallriseError, KeyError, TypeError):
        return None
    wanted = json.dumps([settings, version], sort_keys=True)
    if hashlib.sha256(wanted.encode()).hexdigest() != key:
        return None
    same_recording = entry is not None and entry.stamps[:1] == stamps[:1]
    sha256 = entry.sha256 if entry is not None and same_recording else content_hash(task.recording)
    if provenance.get("sha256") != sha256 or not _same_bench(provenance, digest):
        return None
    try:
        result = read_result(task.out, tracks=False)
    except ResultError:
        return None
    outcome = done_outcome(result, seconds=entry.seconds if entry is not None else 0.0)
    return made_entry(task, outcome, stamps, key)


def _same_bench(provenance: dict[str, object], digest: str) -> bool:
    bench = provenance.get("bench")
    return isinstance(bench, dict) and bench.get("digest") == digest


def made_entry(task: Task, outcome: Outcome, stamps: tuple[Stamp, ...], key: str) -> Entry:
    """Make the ledger's entry of a recording.

    Parameters
    ----------
    task : Task
        The recording.
    outcome : Outcome
        How its measurement went.
    stamps : tuple of Stamp
        Of its files before the measurement.
    key : str
        Of settings and version.

    Returns
    -------
    entry : Entry
        To be appended.
    """
    failed = outcome.status == "failed"
    hashes = tuple(content_hash(Path(path)) for path, _, _ in stamps) if failed and not outcome.again else ()
    return Entry(
        task.name, task.folder, outcome.status, outcome.reason, outcome.again, outcome.droplets, outcome.kept,
        outcome.seconds, outcome.sha256, outcome.bench_digest, outcome.bench, key, recording_date(task).isoformat(),
        stamps, hashes, stamp(task.out / PROVENANCE)[1:], outcome.peak_bytes,
    )  # fmt: skip


def clear_leftovers(out: Path) -> int:
    """Remove half-written files and folders of batches that were killed; the lock must be held.

    Parameters
    ----------
    out : Path
        The output folder.

    Returns
    -------
    removed : int
        Number of files and folders.
    """
    removed = 0
    for root, folders, files in os.walk(out):
        here = Path(root)
        for name in [n for n in folders if _is_part(n)]:
            shutil.rmtree(here / name, ignore_errors=True)
            folders.remove(name)
            removed += 1
        for name in files:
            if _is_part(name):
                (here / name).unlink(missing_ok=True)
                removed += 1
    return removed


def _is_part(name: str) -> bool:
    """Tell the temporary names of the store: hidden, with ``.part`` before the ending or as the ending."""
    return name.startswith(".") and (name.endswith(".part") or ".part." in name)
