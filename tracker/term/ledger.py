"""What a batch has done so far: one JSON line a recording, appended and forced to the disk as each one ends."""

from __future__ import annotations

import json
import os
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass, fields
from pathlib import Path
from types import TracebackType
from typing import Any

from tracker.errors import ResultError
from tracker.keeping.store import replace_file
from tracker.term.walk import Stamp

LEDGER = "batch.jsonl"


@dataclass(frozen=True, slots=True)
class Entry:
    """One recording as the batch left it."""

    recording: str  # path within the folder
    folder: str  # its result folder within the output folder
    status: str  # done or failed
    reason: str  # why it failed, or warnings
    again: bool  # failed for a reason outside the recording: the next batch tries again
    droplets: int
    kept: int
    seconds: float
    sha256: str  # of the recording
    bench_digest: str  # of every value of bench, scale and log that the result depends on
    bench: str  # name of the bench
    settings: str  # settings and version of fallrise
    day: str  # of the recording, ISO
    stamps: tuple[Stamp, ...]  # of recording and input files, before the measurement
    hashes: tuple[str, ...]  # of their contents, as far as they were needed; "" else
    result: tuple[int, int]  # size and time of the result's provenance
    peak_bytes: int = 0  # largest memory of the worker so far


def entry_from(values: Mapping[str, Any]) -> Entry:
    """Give an entry back from plain values.

    Parameters
    ----------
    values : mapping
        As JSON gives them.

    Returns
    -------
    entry : Entry
        The record.

    Raises
    ------
    KeyError, TypeError
        If a field is missing or of the wrong kind.
    """
    plain = {f.name: values[f.name] for f in fields(Entry)}
    plain["stamps"] = tuple((str(p), int(s), int(t)) for p, s, t in plain["stamps"])
    plain["hashes"] = tuple(map(str, plain["hashes"]))
    size, changed = plain["result"]
    plain["result"] = (int(size), int(changed))
    return Entry(**plain)


def read_ledger(out: Path) -> dict[str, Entry]:
    """Read the ledger of an output folder.

    Parameters
    ----------
    out : Path
        The folder.

    Returns
    -------
    entries : dict of str to Entry
        The last entry of each recording; a line cut off by a crash is left out.
    """
    entries: dict[str, Entry] = {}
    try:
        text = (out / LEDGER).read_text(encoding="utf-8", errors="replace")
    except FileNotFoundError:
        return entries
    except OSError as error:
        raise ResultError(str(out / LEDGER), f"cannot be read ({error.strerror or error})") from error
    for line in text.splitlines():
        try:
            entry = entry_from(json.loads(line))
        except (ValueError, KeyError, TypeError):
            continue
        entries[entry.recording] = entry
    return entries


def _line(entry: Entry) -> str:
    return json.dumps(asdict(entry), ensure_ascii=False) + "\n"


def write_ledger(out: Path, entries: Iterable[Entry]) -> None:
    """Replace the ledger, one line a recording.

    Parameters
    ----------
    out : Path
        The output folder.
    entries : iterable of Entry
        What is known.

    Raises
    ------
    ResultError
        If it cannot be written; the old one stays.
    """
    text = "".join(map(_line, entries))
    replace_file(out / LEDGER, lambda part: part.write_text(text, encoding="utf-8"))


class Ledger:
    """The ledger open for appending; use it in a `with` block."""

    def __init__(self, out: Path) -> None:
        self.path = out / LEDGER
        try:
            self._stream = self.path.open("a", encoding="utf-8")
        except OSError as error:
            raise ResultError(str(self.path), f"cannot be written ({error.strerror or error})") from error

    def append(self, entry: Entry) -> None:
        """Write one entry and force it to the disk.

        Parameters
        ----------
        entry : Entry
            Of a recording that has just ended.

        Raises
        ------
        ResultError
            If the disk is full.
        """
        try:
            self._stream.write(_line(entry))
            self._stream.flush()
            os.fsync(self._stream.fileno())
        except OSError as error:
            raise ResultError(
                str(self.path), f"cannot be written ({error.strerror or error}); finished work is kept"
            ) from error

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stream.close()
