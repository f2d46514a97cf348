"""Worker processes behind an executor, and a loop that no dying worker stops. Light to import."""

from __future__ import annotations

import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, CancelledError, Executor, Future, wait
from types import TracebackType
from typing import Any, Protocol, TypeVar

from tracker.errors import UsageError

T = TypeVar("T")
R = TypeVar("R")

_TRIES_ALONE = 2  # a task that ends its worker so often, alone in it, is given up


class Crew(Protocol):
    """Workers, here or elsewhere, as an executor; used in a `with` block."""

    slots: int  # tasks that run at the same time
    losses: tuple[type[BaseException], ...]  # what a future raises when its worker died

    def executor(self) -> Executor:
        """Give an executor that works; a new one if the last broke."""

    def __enter__(self) -> Crew: ...

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None: ...


class LocalCrew:
    """Processes on this machine, one thread each.

    Parameters
    ----------
    workers : int or None
        Number of processes; None: one for each core that this process may use.
    """

    losses: tuple[type[BaseException], ...] = (BrokenExecutor, CancelledError)

    def __init__(self, workers: int | None = None) -> None:
        if workers is not None and workers < 1:
            raise UsageError(f"--workers {workers}: must be 1 or more")
        self.slots = workers or _cores()
        self._executor: Executor | None = None

    def executor(self) -> Executor:
        """Give a pool of processes; a new one if a process of the last died."""
        from concurrent.futures import ProcessPoolExecutor
        from multiprocessing import get_context

        if self._executor is None or getattr(self._executor, "_broken", False):
            self.close()
            self._executor = ProcessPoolExecutor(
                self.slots, mp_context=get_context("spawn"), initializer=_start_worker
            )
        return self._executor

    def close(self, *, at_once: bool = False) -> None:
        """End the processes; `at_once` without waiting for what they do."""
        if self._executor is None:
            return
        processes = list((getattr(self._executor, "_processes", None) or {}).values())
        self._executor.shutdown(wait=not at_once, cancel_futures=True)
        for process in processes if at_once else ():
            process.terminate()
        self._executor = None

    def __enter__(self) -> LocalCrew:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close(at_once=kind is not None)


def _cores() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _start_worker() -> None:
    """Prepare a worker process: one thread, deaf to Ctrl-C, and gone when the batch is gone."""
    from tracker.term.work import one_thread

    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the batch decides when to stop
    threading.Thread(target=_end_with_parent, name="parent", daemon=True).start()
    one_thread()


def _end_with_parent() -> None:
    """End this process as soon as the one that started it has died, however that happened."""
    from multiprocessing import parent_process

    parent = parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def run_all(
    crew: Crew, work: Callable[..., R], tasks: Sequence[T], *extra: Any
) -> Iterator[tuple[T, R | None]]:
    """Run `work(task, *extra)` for every task, in any order.

    Parameters
    ----------
    crew : Crew
        Within its `with` block.
    work : callable
        Importable by name, so that it reaches other processes.
    tasks : sequence
        Each is the first argument of one call.
    *extra
        Further arguments, the same for all.

    Yields
    ------
    task, outcome
        As each ends; None for a task that twice took its worker down while nothing else ran.

    Notes
    -----
    A dead process takes all that ran beside it along. These tasks are then run one at a time, so that the
    one that is to blame is told from the others.
    """
    waiting, suspects = deque(tasks), deque[tuple[T, int]]()  # suspects with the workers they ended alone
    running: dict[Future[R], tuple[T, int | None]] = {}  # None: not alone
    while waiting or suspects or running:
        if suspects and not running:  # they start only when nothing else runs, one by one
            task, ended = suspects.popleft()
            running[_submit(crew, work, task, *extra)] = task, ended
        while not suspects and waiting and len(running) < 2 * crew.slots and _together(running):
            task = waiting.popleft()  # some more than run, so that no worker waits for work
            running[_submit(crew, work, task, *extra)] = task, None
        for future in wait(running, return_when=FIRST_COMPLETED).done:
            task, before = running.pop(future)
            try:
                outcome = future.result()
            except crew.losses:
                ended = 0 if before is None else before + 1
                if ended < _TRIES_ALONE:
                    suspects.append((task, ended))
                else:
                    yield task, None
                continue
            yield task, outcome


def _together(running: Mapping[Any, tuple[Any, int | None]]) -> bool:
    """Tell whether no task runs that is to be alone."""
    return all(ended is None for _, ended in running.values())


def _submit(crew: Crew, work: Callable[..., R], *arguments: Any) -> Future[R]:
    """Hand a task over; a pool that broke since the last look is replaced."""
    try:
        return crew.executor().submit(work, *arguments)
    except crew.losses:
        return crew.executor().submit(work, *arguments)
