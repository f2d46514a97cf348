"""Results of a batch, read in a thread of its own while worker processes measure, so that its end is short."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from importlib import import_module
from pathlib import Path
from types import TracebackType

from tracker.errors import ResultError
from tracker.keeping.store import PROVENANCE, Result, read_result
from tracker.term.ledger import Entry
from tracker.term.walk import Stamp, stamp


def read_results(out: Path, entries: Sequence[Entry]) -> dict[str, Result]:
    """Read the results of the recordings that are done, without their tracks.

    Parameters
    ----------
    out : Path
        Output folder of the batch.
    entries : sequence of Entry
        One a recording.

    Returns
    -------
    results : dict of str to Result
        By the recording's path; a result that cannot be read is left out.
    """
    read = {entry.recording: _read(out, entry)[1] for entry in entries if entry.status == "done"}
    return {name: result for name, result in read.items() if result is not None}


class Reading:
    """Reads results once it was started, and loads what tables and report need; use it in a `with` block.

    Parameters
    ----------
    out : Path
        Output folder of the batch.
    """

    def __init__(self, out: Path) -> None:
        self._out = out
        self._thread = ThreadPoolExecutor(1, "reading")
        self._read: dict[str, Future[tuple[Stamp, Result | None]]] = {}

    def start(self, entries: Iterable[Entry]) -> None:
        """Read what is done already, in a while."""
        self._thread.submit(_load_libraries)
        for entry in entries:
            self.add(entry)

    def add(self, entry: Entry) -> None:
        """Read a result in a while, unless the recording failed."""
        if entry.status == "done":
            self._read[entry.recording] = self._thread.submit(_read, self._out, entry)

    def results(self, entries: Sequence[Entry]) -> dict[str, Result]:
        """Give what `read_results` would give now: what has changed since it was read is read again."""
        made: dict[str, Result] = {}
        for entry in entries:
            if entry.status != "done":
                continue
            found = self._read.get(entry.recording)
            seen, result = found.result() if found is not None else _read(self._out, entry)
            if seen != stamp(self._out / entry.folder / PROVENANCE):
                _, result = _read(self._out, entry)
            if result is not None:
                made[entry.recording] = result
        return made

    def __enter__(self) -> Reading:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._thread.shutdown(cancel_futures=True)


def _read(out: Path, entry: Entry) -> tuple[Stamp, Result | None]:
    """One result with the stamp that it had before it was read; None if it cannot be read."""
    seen = stamp(out / entry.folder / PROVENANCE)
    try:
        return seen, read_result(out / entry.folder, tracks=False)
    except ResultError:
        return seen, None


def _load_libraries() -> None:
    """Import what tables and report are made with."""
    for name in ("tracker.term.report", "scipy.special", "matplotlib.backends.backend_svg"):
        import_module(name)
