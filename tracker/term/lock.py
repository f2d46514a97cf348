"""One batch at a time on an output folder: a lock that the operating system drops when its holder dies."""

from __future__ import annotations

import json
import os
import socket
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import IO

from tracker.errors import ResultError

LOCK = ".batch.lock"


@contextmanager
def locked(out: Path) -> Iterator[Path]:
    """Hold an output folder; it is made if missing.

    Parameters
    ----------
    out : Path
        The folder.

    Yields
    ------
    lock : Path
        The lock file; its text names the holder. It stays when the lock is given back.

    Raises
    ------
    ResultError
        If another batch holds it, or nothing can be written there.

    Notes
    -----
    A lock of the operating system on an open file: it ends with the process, however that ends. Over NFS the
    server has to support locks, as it does by default.
    """
    path = out / LOCK
    try:
        out.mkdir(parents=True, exist_ok=True)
        stream = path.open("a+", encoding="utf-8")
    except OSError as error:
        raise ResultError(str(out), f"cannot be written ({error.strerror or error})") from error
    with stream:
        if not _try_lock(stream):
            stream.seek(0)
            raise ResultError(str(out), f"another batch works there ({_holder(stream.read())}); wait for its end "
                              "or name another folder with --out")  # fmt: skip
        stream.seek(0)
        stream.truncate()
        now = datetime.now(UTC).isoformat(timespec="seconds")
        json.dump({"process": os.getpid(), "host": socket.gethostname(), "since": now}, stream)
        stream.flush()
        yield path


def _holder(text: str) -> str:
    """Words for who holds the lock."""
    try:
        told = json.loads(text)
        return f"process {told['process']} on {told['host']} since {told['since']}"
    except (ValueError, KeyError, TypeError):
        return "holder unknown"


def _try_lock(stream: IO[str]) -> bool:
    """Take an exclusive lock without waiting."""
    try:
        import fcntl
    except ImportError:  # Windows
        return _try_lock_windows(stream)
    try:
        fcntl.flock(stream.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True


def _try_lock_windows(stream: IO[str]) -> bool:
    import importlib

    msvcrt = importlib.import_module("msvcrt")
    stream.seek(1 << 20)  # a byte far behind the text, so that others can read who holds the lock
    try:
        msvcrt.locking(stream.fileno(), msvcrt.LK_NBLCK, 1)
    except OSError:
        return False
    return True
