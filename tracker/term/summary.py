"""Tables over a whole term: `batch.csv`, `droplets.csv`, the README beside them, and the report."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING

from tracker.keeping.store import Result, replace_file
from tracker.keeping.tables import (
    BATCH,
    CHANGES,
    DROPLETS,
    SEGMENTS,
    TRACKS,
    Column,
    describe,
    table,
    write_csv,
)
from tracker.term.ledger import Entry
from tracker.term.reading import read_results

if TYPE_CHECKING:
    import pandas as pd

SUMMARY = ".batch.summary"  # hash of what the tables were made from
TERM_DROPLETS = (Column("recording", "", "path within the folder", "text"), *DROPLETS)
_FILES = ("batch.csv", "droplets.csv", "README.md", "report.html")
_HEAD = """# Results of a term

Made by `fallrise batch`; running it again goes on where it stopped. All values are SI; an empty cell could not be
measured. `batch.csv` has a line for each recording, `droplets.csv` one for each droplet of every recording (a recording
that lies there twice, too: `reason` in `batch.csv` then names the other one, and reports and pools count one), and each
recording has a folder `PATH.fallrise` with the tables below, `recording.json` (where every value came from) and
`decisions.jsonl` (what a person decided). `report.html` shows it all on one page. `batch.jsonl` is the batch's own
memory of what is done. A text cell that would begin a formula in a spreadsheet has an apostrophe before it.
Columns of `tracks.parquet`, if chosen, are those of `tracks.csv`, with unit and meaning in the field's metadata.
"""


def write_summary(
    out: Path,
    entries: Sequence[Entry],
    *,
    read: Callable[[Sequence[Entry]], Mapping[str, Result]] | None = None,
) -> bool:
    """Write tables and report of a batch, if anything has changed since they were last written.

    Parameters
    ----------
    out : Path
        The output folder.
    entries : sequence of Entry
        One a recording, in the order of the tables.
    read : callable, optional
        Gives what `read_results` would give for entries; None: that function reads them now.

    Returns
    -------
    changed : bool
        False if all is as it was.

    Raises
    ------
    ResultError
        If a file cannot be written; the old one stays.
    """
    from tracker.term.report import repeated_recordings, write_term_report

    digest = _digest(entries)
    marker = out / SUMMARY
    if all((out / name).is_file() for name in _FILES) and _text(marker) == digest:
        return False
    results = read_results(out, entries) if read is None else read(entries)
    repeated = repeated_recordings(results)
    told = [_told_twice(entry, repeated.get(entry.recording)) for entry in entries]
    rows, droplets = table(told, BATCH), term_droplets(results)
    replace_file(out / "batch.csv", lambda part: write_csv(rows, part, BATCH))
    replace_file(out / "droplets.csv", lambda part: write_csv(droplets, part, TERM_DROPLETS))
    replace_file(out / "README.md", lambda part: part.write_text(readme(), encoding="utf-8"))
    write_term_report(out, entries, results)
    replace_file(marker, lambda part: part.write_text(digest, encoding="utf-8"))
    return True


def _told_twice(entry: Entry, why: str | None) -> Entry:
    """Say before a recording's warnings that another one repeats it."""
    return entry if why is None else replace(entry, reason="; ".join(filter(None, (why, entry.reason))))


def _digest(entries: Sequence[Entry]) -> str:
    plain = json.dumps([asdict(entry) for entry in entries])
    return hashlib.sha256(plain.encode()).hexdigest()


def _text(path: Path) -> str:
    return path.read_text(encoding="utf-8") if path.is_file() else ""


def term_droplets(results: Mapping[str, Result]) -> pd.DataFrame:
    """Gather the droplet rows of all recordings that are done.

    Parameters
    ----------
    results : mapping of str to Result
        By the recording's path, in the order of the table.

    Returns
    -------
    table : DataFrame
        Columns of `TERM_DROPLETS`.
    """
    import pandas as pd

    parts = []
    for name, result in results.items():
        if len(result.droplets):
            rows = result.droplets.copy()
            rows.insert(0, "recording", pd.array([name] * len(rows), dtype="string"))
            parts.append(rows)
    return pd.concat(parts, ignore_index=True) if parts else table([], TERM_DROPLETS)


def readme() -> str:
    """Give the text beside the tables: every column with unit and meaning.

    Returns
    -------
    text : str
        Markdown.
    """
    tables: dict[str, Sequence[Column]] = {
        "batch.csv": BATCH, "droplets.csv of the term": TERM_DROPLETS, "PATH.fallrise/droplets.csv": DROPLETS,
        "PATH.fallrise/segments.csv": SEGMENTS, "PATH.fallrise/changes.csv": CHANGES,
        "PATH.fallrise/tracks.csv": TRACKS,
    }  # fmt: skip
    return "\n".join([_HEAD, *(describe(columns, name=name) for name, columns in tables.items())])
