"""What a worker does: measure one recording and tell how it went. Light to import: workers start with it."""

from __future__ import annotations

import errno
import os
import time
from dataclasses import dataclass
from importlib.metadata import version
from typing import TYPE_CHECKING

from physics.errors import FallriseError
from tracker.errors import ResultError

if TYPE_CHECKING:
    from tracker.keeping.store import Result
    from tracker.records import Settings
    from tracker.term.walk import Task

_THREAD_VARIABLES = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS", "NUMEXPR_NUM_THREADS",
)  # fmt: skip
_NO_SPACE = (errno.ENOSPC, errno.EDQUOT)


class WorkerVersionError(FallriseError):
    """A worker runs another version of fallrise than the batch.

    Parameters
    ----------
    worker : str
        Which one.
    found, needed : str
        Its version and the batch's.
    """

    def __init__(self, worker: str, found: str, needed: str) -> None:
        super().__init__(worker, found, needed)
        self.worker, self.found, self.needed = worker, found, needed

    def __str__(self) -> str:
        return f"worker {self.worker} has fallrise {self.found}; the batch has {self.needed}: install the same on both"


@dataclass(frozen=True, slots=True)
class Outcome:
    """How the measurement of one recording went."""

    status: str  # done or failed
    reason: str  # why it failed, or warnings
    again: bool = False  # the failure lies outside the recording
    disk_full: bool = False
    droplets: int = 0
    kept: int = 0
    seconds: float = 0.0
    sha256: str = ""
    bench_digest: str = ""
    bench: str = ""
    peak_bytes: int = 0


def current_version() -> str:
    """Give the version of fallrise that is running."""
    return version("fallrise")


def one_thread() -> None:
    """Let numerical libraries use one thread: as many processes as cores work already."""
    for name in _THREAD_VARIABLES:
        os.environ[name] = "1"
    import cv2

    cv2.setNumThreads(1)


def measure_task(task: Task, settings: Settings, needed: str) -> Outcome:
    """Measure one recording.

    Parameters
    ----------
    task : Task
        The recording, its bench, its result folder.
    settings : Settings
        For all recordings of the batch.
    needed : str
        Version of fallrise that the batch runs.

    Returns
    -------
    outcome : Outcome
        Also for a recording that cannot be measured: it never stops the others.

    Raises
    ------
    WorkerVersionError
        If this process runs another version.
    """
    if current_version() != needed:
        raise WorkerVersionError(f"process {os.getpid()}", current_version(), needed)
    from tracker.measure import measure

    start = time.perf_counter()
    try:
        result = measure(task.recording, bench=task.bench, out=task.out, settings=settings)
    except FallriseError as error:
        return _failed(task, _line(task, error), error, start)
    except MemoryError as error:
        return _failed(task, "memory ran out; use fewer workers", error, start)
    except Exception as error:
        told = f"unexpected {type(error).__name__}: {error}; `fallrise --debug measure` shows more"
        return _failed(task, " ".join(told.split()), error, start)
    return done_outcome(result, seconds=time.perf_counter() - start)


def done_outcome(result: Result, *, seconds: float) -> Outcome:
    """Tell of a result.

    Parameters
    ----------
    result : Result
        As written.
    seconds : float
        That it took.

    Returns
    -------
    outcome : Outcome
        Status done.
    """
    bench = result.recording.get("bench", {})
    return Outcome(
        "done", "; ".join(result.recording.get("warnings", [])), droplets=len(result.droplets),
        kept=int((result.droplets["verdict"] == "keep").sum()), seconds=seconds,
        sha256=str(result.recording.get("sha256", "")), bench_digest=str(bench.get("digest", "")),
        bench=str(bench.get("name", "")), peak_bytes=peak_memory(),
    )  # fmt: skip


def _line(task: Task, error: FallriseError) -> str:
    """What failed in one line; the recording's own name stands beside it already."""
    return " ".join(str(error).removeprefix(f"{task.recording}: ").split())


def _failed(task: Task, reason: str, error: BaseException, start: float) -> Outcome:
    """Tell of a recording that could not be measured."""
    from tracker.term.walk import content_hash

    causes = [error, error.__cause__, error.__context__]
    full = any(isinstance(cause, OSError) and cause.errno in _NO_SPACE for cause in causes)
    outside = full or isinstance(error, (ResultError, MemoryError, OSError))
    return Outcome("failed", reason, again=outside, disk_full=full, seconds=time.perf_counter() - start,
                   sha256=content_hash(task.recording), bench=_bench_name(task), peak_bytes=peak_memory())  # fmt: skip


def _bench_name(task: Task) -> str:
    """Name of the bench of a recording that failed; empty if the bench is the reason."""
    from tracker.bench import load_bench

    try:
        return load_bench(task.bench, recording=task.recording).name
    except FallriseError:
        return ""


def peak_memory() -> int:
    """Give the largest resident memory of this process so far in bytes; 0 where the system does not tell."""
    try:
        import resource
    except ImportError:  # Windows
        return 0
    import sys

    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return int(peak if sys.platform == "darwin" else peak * 1024)
