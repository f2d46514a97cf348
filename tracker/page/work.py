"""The child process of a job: reads one task, says what it does in JSON lines, ends with its parent.

``python -m tracker.page.work``; see `tracker.page.jobs` for the lines. An end of standard input or SIGTERM
raises SystemExit in the main thread, so that everything half made is cleared away by its own ``finally``.
"""

from __future__ import annotations

import json
import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from types import FrameType
from typing import Any

from physics.errors import FallriseError
from tracker.page.errors import status_of

GRACE = 4.0  # s for the main thread to clear up after the parent is gone


def say(**facts: Any) -> None:
    """Print one line for the server; if nobody listens any more, end."""
    try:
        sys.stdout.write(json.dumps(facts) + "\n")
        sys.stdout.flush()
    except (BrokenPipeError, ValueError):
        raise SystemExit(143) from None


class Progress:
    """Callable (done, total) that reports ten times a second at most."""

    def __init__(self, text: str) -> None:
        self._text, self._last = text, 0.0

    def __call__(self, done: float, total: float) -> None:
        """Report `done` of `total`; a total of 0 means that the end is not known."""
        now = time.monotonic()
        if now - self._last > 0.1 or done >= total:
            self._last = now
            say(progress=min(1.0, done / total) if total else 0.0, text=self._text)


def main() -> int:
    """Carry out the task on standard input; the exit status is 0 or 1."""
    signal.signal(signal.SIGTERM, _end)
    task = json.loads(sys.stdin.readline())
    threading.Thread(target=_watch_parent, daemon=True).start()
    try:
        run = _TASKS[task.pop("kind")]
        run(**task)
    except (FallriseError, OSError) as error:
        facts = {name: getattr(error, name) for name in ("key", "found", "allowed") if hasattr(error, name)}
        say(error={"message": " ".join(str(error).split()), **facts}, status=status_of(error))
        return 1
    return 0


def _end(_number: int, _frame: FrameType | None) -> None:
    raise SystemExit(143)


def _watch_parent() -> None:
    """Wait for the end of standard input, then end this process, hard if the polite way takes too long."""
    while os.read(0, 4096):
        pass
    os.kill(os.getpid(), signal.SIGTERM)
    time.sleep(GRACE)
    os._exit(143)


def pack(*, recording: str, path: str, frame_rate: float | None, sha256: str, frames: int) -> None:
    """Write the frame pack of a recording."""
    from tracker.keeping.store import file_hash
    from tracker.page.pack import make_room, write_pack

    source = Path(recording)
    if source.is_file() and sha256 and file_hash(source) != sha256:
        from tracker.errors import RecordingError

        raise RecordingError(recording, "is not the file that was measured; measure it again")
    progress = Progress("reading the pictures")
    done = 0

    def hear(said: list[tuple[int, int, float]]) -> None:
        nonlocal done
        done += len(said)
        say(frames=said)
        progress(done, max(frames, done))

    make_room(Path(path).parent, 0)
    say(done={"frames": write_pack(_batches(source, frame_rate), Path(path), hear=hear)})


def measure(**task: Any) -> None:
    """Measure one recording that came from the page."""
    from tracker.page.measuring import measure as measure_one

    measure_one(progress=Progress, **task)


def video(*, result: str, first: int, last: int, out: str) -> None:
    """Draw frames first to last, both included, with their tracks into a video."""
    from tracker.export import write_overlay

    Path(out).parent.mkdir(parents=True, exist_ok=True)
    write_overlay(result, frames=f"{first}:{last + 1}", out=Path(out), progress=Progress("drawing"))
    say(done={"path": out})


def _batches(recording: Path, frame_rate: float | None) -> Iterator[Any]:
    """Frame times and pictures of a recording, batch by batch."""
    from tracker.seeing.frames import open_recording

    with open_recording(recording, frame_rate=frame_rate) as reader:
        for batch in reader:
            yield batch.times, batch.pictures


_TASKS: dict[str, Callable[..., None]] = {"pack": pack, "measure": measure, "video": video}

if __name__ == "__main__":
    sys.exit(main())
