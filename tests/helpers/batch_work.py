"""Work for worker processes in tests; importable by name in a new process."""

from __future__ import annotations

import os
import signal
import time
from pathlib import Path


def double(task: int, folder: str) -> tuple[int, int]:
    """Twice the task, and the process that did it."""
    (Path(folder) / f"{task}.done").touch()
    return 2 * task, os.getpid()


def killed_once(task: int, folder: str) -> int:
    """Task 3 takes its process down the first time, as if memory had run out."""
    mark = Path(folder) / "killed"
    if task == 3 and not mark.exists():
        mark.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    time.sleep(0.02)
    return task


def always_killed(task: int, folder: str) -> int:
    """Task 3 takes its process down every time."""
    if task == 3:
        with (Path(folder) / "kills").open("a") as stream:
            stream.write("x")
        os.kill(os.getpid(), signal.SIGKILL)
    return task


def raises(task: int, folder: str) -> int:
    """Task 1 raises an error that is none of a dying worker."""
    if task == 1:
        raise ValueError("one")
    return task


def sleep_long(task: int, folder: str) -> int:
    """Tell the process and sleep for a minute."""
    (Path(folder) / f"pid{os.getpid()}").touch()
    time.sleep(60)
    return task


def threads(task: int, folder: str) -> tuple[int, str]:
    """Threads that numerical libraries may use here."""
    import cv2

    return cv2.getNumThreads(), os.environ["OMP_NUM_THREADS"]
