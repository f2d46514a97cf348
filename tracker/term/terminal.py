"""What a person sees of a batch on the terminal: one bar over all recordings, then what failed."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager

from tracker.showing.terminal import count
from tracker.term.batch import Batch, Progress


@contextmanager
def batch_bar(*, hidden: bool = False) -> Iterator[Progress | None]:
    """Show one bar over all recordings on standard error, with time left and failures counted.

    Parameters
    ----------
    hidden : bool, optional
        True shows nothing; so does standard error that is no terminal.

    Yields
    ------
    progress : callable or None
        For `tracker.term.batch.run_batch`.
    """
    if hidden or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        TextColumn,
        TimeElapsedColumn,
        TimeRemainingColumn,
    )
    from rich.progress import Progress as Bar

    columns = (
        TextColumn("recordings"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("{task.fields[failed]} failed, left"),
        TimeRemainingColumn(),
        TextColumn("gone"),
        TimeElapsedColumn(),
    )
    with Bar(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("recordings", total=None, failed=0)
        yield lambda done, total, failed: bar.update(task, completed=done, total=total, failed=failed)


def batch_text(batch: Batch) -> str:
    """Say what a batch did.

    Parameters
    ----------
    batch : Batch
        As it ended.

    Returns
    -------
    text : str
        Lines for the terminal; one for each failure.
    """
    done = len(batch.entries) - len(batch.failed)
    kept = sum(entry.kept for entry in batch.entries)
    droplets = sum(entry.droplets for entry in batch.entries)
    counts = f"{done} done, {len(batch.failed)} failed, {batch.measured} measured now"
    lines = [f"{count(len(batch.entries), 'recording')}: {counts}; {count(droplets, 'droplet')}, {kept} kept"]
    contents = [entry.sha256 for entry in batch.entries if entry.status == "done" and entry.sha256]
    repeats = len(contents) - len(set(contents))
    if repeats:
        again = "repeats another one" if repeats == 1 else "repeat others"
        lines.append(
            f"{count(repeats, 'recording')} {again}: in report and pool each counts once; batch.csv names them"
        )
    lines += [f"failed: {entry.recording}: {entry.reason}" for entry in batch.failed]
    return "\n".join([*lines, f"result: {batch.out}"])
