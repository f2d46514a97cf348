"""A term's recordings in one command: walk, resume, measure in worker processes, gather the tables."""

from __future__ import annotations

from collections.abc import Callable, Generator, Sequence
from contextlib import AbstractContextManager, closing
from dataclasses import dataclass, field
from pathlib import Path

from tracker.errors import ResultError
from tracker.records import Settings
from tracker.term.crew import Crew, LocalCrew, run_all
from tracker.term.ledger import Entry, Ledger, read_ledger, write_ledger
from tracker.term.lock import locked
from tracker.term.reading import Reading
from tracker.term.resume import clear_leftovers, made_entry, settings_key, standing, task_stamps
from tracker.term.summary import write_summary
from tracker.term.walk import Stamp, Task, find_tasks
from tracker.term.work import Outcome, current_version, measure_task

Progress = Callable[[int, int, int], None]  # recordings done, in all, failed
DEFAULT_OUT = "fallrise-results"
_DIED = (
    "the worker process died twice with it (killed, or memory ran out); look at it alone, with fewer workers"
)


@dataclass(frozen=True, slots=True)
class Options:
    """What a user may choose for a batch."""

    bench: Path | None = None  # one bench file for all; None: found by each recording's place
    settings: Settings = field(default_factory=Settings)
    workers: int | None = None  # processes on this machine; None: one a core
    cluster: str = ""  # address of a dask scheduler, instead of processes on this machine
    retry: bool = False  # try failed recordings again, though nothing changed


@dataclass(frozen=True, slots=True)
class Batch:
    """What a batch found and did."""

    out: Path
    entries: tuple[Entry, ...]  # one a recording, ordered by name
    measured: int  # recordings measured by this run
    changed: bool  # tables were written

    @property
    def failed(self) -> tuple[Entry, ...]:
        """Recordings that could not be measured."""
        return tuple(entry for entry in self.entries if entry.status == "failed")


def run_batch(
    folder: Path | str,
    *,
    out: Path | str | None = None,
    options: Options | None = None,
    progress: Progress | None = None,
) -> Batch:
    """Measure all recordings of a folder; what is done already is left alone.

    Parameters
    ----------
    folder : path-like
        With recordings anywhere below; bench files and scales are found by each recording's place.
    out : path-like, optional
        Output folder; ``fallrise-results`` in `folder` if not given.
    options : Options, optional
        Bench, settings, workers.
    progress : callable, optional
        Takes (done, all, failed) after each recording.

    Returns
    -------
    batch : Batch
        With the entry of every recording; failures do not raise.

    Raises
    ------
    FallriseError
        If there is no such folder, another batch holds the output folder, the disk is full, or the cluster
        cannot be used. Finished work is kept.

    Notes
    -----
    Worker processes import the script that calls this: guard the call by ``if __name__ == "__main__":``.
    """
    folder = Path(folder)
    out = Path(out) if out is not None else folder / DEFAULT_OUT
    options = options or Options()
    tasks = find_tasks(folder, out, bench=options.bench)
    if not tasks:
        raise ResultError(
            str(folder), "holds no recordings; known are video files, TIFF stacks, picture folders"
        )
    with locked(out) as lock, Reading(out) as reading:
        clear_leftovers(out)
        old = read_ledger(out)
        entries, todo = _sort(tasks, old, options)
        if entries != old:
            write_ledger(out, entries.values())
        if todo:
            reading.start(entries.values())
        try:
            with closing(_measure(todo, out, options, lock)) as made:
                _tell(progress, entries, tasks)
                for entry in made:
                    entries[entry.recording] = entry
                    reading.add(entry)
                    _tell(progress, entries, tasks)
        finally:  # what is finished is in the tables, whatever ended this run
            if todo:
                clear_leftovers(out)
            made_now = [entries[task.name] for task in tasks if task.name in entries]
            changed = write_summary(out, made_now, read=reading.results)
    return Batch(out, tuple(entries[task.name] for task in tasks), len(todo), changed)


Todo = list[tuple[Task, tuple[Stamp, ...]]]


def _tell(progress: Progress | None, entries: dict[str, Entry], tasks: Sequence[Task]) -> None:
    if progress is not None:
        progress(len(entries), len(tasks), sum(entry.status == "failed" for entry in entries.values()))


def _sort(tasks: Sequence[Task], old: dict[str, Entry], options: Options) -> tuple[dict[str, Entry], Todo]:
    """Tell what is done from what is to be done."""
    key = settings_key(options.settings)
    entries: dict[str, Entry] = {}
    todo: Todo = []
    for task in tasks:
        stamps = task_stamps(task)
        entry = standing(task, old.get(task.name), stamps, key, retry=options.retry)
        if entry is None:
            todo.append((task, stamps))
        else:
            entries[task.name] = entry
    return entries, todo


def _crew(options: Options, lock: Path) -> AbstractContextManager[Crew]:
    """Workers as the user wants them; the lock file tells a cluster's workers that they see the output folder."""
    if options.cluster:
        from tracker.term.cluster import ClusterCrew

        return ClusterCrew(options.cluster, lock)
    return LocalCrew(options.workers)


def _measure(todo: Todo, out: Path, options: Options, lock: Path) -> Generator[Entry, None, None]:
    """Measure what is to be done, and note each recording in the ledger as it ends."""
    if not todo:
        return
    key, stamps = settings_key(options.settings), {task.name: found for task, found in todo}
    tasks = [task for task, _ in todo]
    with _crew(options, lock) as crew, Ledger(out) as ledger:
        for task, outcome in run_all(crew, measure_task, tasks, options.settings, current_version()):
            made = outcome or Outcome("failed", _DIED, again=True)
            entry = made_entry(task, made, stamps[task.name], key)
            ledger.append(entry)
            yield entry
            if made.disk_full:
                raise ResultError(str(task.out), "the disk is full; free some space and run the batch again")
