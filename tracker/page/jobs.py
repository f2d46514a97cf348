"""Long work in child processes: started, followed, cancelled, and ended with the server.

A child reads its task as one JSON line on standard input and prints JSON lines: ``progress`` and ``text``
while it works, ``frames`` of a growing frame pack, and at last ``done`` or ``error``. Standard input stays
open: its end tells the child that the server is gone, however it went.
"""

from __future__ import annotations

import asyncio
import contextlib
import json
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from itertools import count
from typing import Any, cast

from tracker.page.errors import RefusedError

MAX_RUNNING = 2
MAX_WAITING = 20
KEPT = 50  # ended jobs that are still listed
GRACE = 5.0  # s between the polite and the hard end
LINE_LIMIT = 4 * 1024 * 1024  # bytes of one line from a child


@dataclass(slots=True)
class Job:
    """One piece of long work; `state` is waiting, running, done, failed or cancelled."""

    number: int
    kind: str
    title: str
    task: dict[str, Any]
    key: str = ""  # two jobs with one key never run at a time: the second asker gets the first job
    state: str = "waiting"
    progress: float = 0.0  # 0 to 1
    text: str = ""
    error: dict[str, Any] | None = None
    status: int = 0  # HTTP status that the error stands for
    result: dict[str, Any] = field(default_factory=dict)
    started: float = 0.0  # s, monotonic clock
    ended: float = 0.0
    hear: Callable[[dict[str, Any]], None] | None = None  # gets every line of the child
    finish: Callable[[Job], None] | None = None  # runs once when the job ends, however it ends
    process: asyncio.subprocess.Process | None = None

    @property
    def over(self) -> bool:
        """Whether nothing will happen any more."""
        return self.state in ("done", "failed", "cancelled")

    def shown(self) -> dict[str, Any]:
        """Give what the page may see."""
        until = self.ended or time.monotonic()
        return {
            "number": self.number, "kind": self.kind, "title": self.title, "state": self.state,
            "progress": round(self.progress, 4), "text": self.text, "error": self.error,
            "seconds": round(until - self.started, 1) if self.started else 0.0, "result": self.result,
        }  # fmt: skip


class Jobs:
    """All jobs of one server."""

    def __init__(self) -> None:
        self._jobs: dict[int, Job] = {}
        self._numbers = count(1)
        self._runners: set[asyncio.Task[None]] = set()

    def start(self, job: Job) -> Job:
        """Queue a job, or give the one that is already at the same work."""
        for other in self._jobs.values():
            if job.key and other.key == job.key and not other.over:
                return other
        if sum(not other.over for other in self._jobs.values()) >= MAX_WAITING:
            raise RefusedError(429, f"{MAX_WAITING} jobs are waiting already; wait or cancel one")
        job.number = next(self._numbers)
        self._jobs[job.number] = job
        self._advance()
        return job

    def get(self, number: int) -> Job:
        """Give one job, or refuse with 404."""
        if number not in self._jobs:
            raise RefusedError(404, f"there is no job {number}")
        return self._jobs[number]

    def last(self, key: str) -> Job | None:
        """Give the latest job at some work."""
        return max(
            (job for job in self._jobs.values() if job.key == key), key=lambda job: job.number, default=None
        )

    def all(self) -> list[Job]:
        """Give all jobs that are remembered, oldest first."""
        return list(self._jobs.values())

    def cancel(self, number: int) -> Job:
        """Ask a job to end; one that waits ends at once."""
        job = self.get(number)
        if job.state == "waiting":
            self._end(job, "cancelled")
        elif job.state == "running" and job.process is not None:
            job.text = "stopping"
            job.state = "cancelling"
            self._keep(asyncio.ensure_future(_stop(job.process)))
        return job

    async def close(self) -> None:
        """End everything; nothing that was started outlives this."""
        for job in list(self._jobs.values()):
            if not job.over:
                self.cancel(job.number)
        while self._runners:
            await asyncio.gather(*self._runners, return_exceptions=True)

    def _advance(self) -> None:
        """Start waiting jobs while there is room, and forget the oldest that ended."""
        running = sum(job.state in ("running", "cancelling") for job in self._jobs.values())
        for job in [job for job in self._jobs.values() if job.state == "waiting"][: MAX_RUNNING - running]:
            job.state, job.started = "running", time.monotonic()
            self._keep(asyncio.ensure_future(self._run(job)))
        for job in [job for job in self._jobs.values() if job.over][:-KEPT]:
            del self._jobs[job.number]

    def _keep(self, task: asyncio.Task[None]) -> None:
        """Hold a task until it ends: the loop itself holds tasks only weakly."""
        self._runners.add(task)
        task.add_done_callback(self._runners.discard)

    async def _run(self, job: Job) -> None:
        """Run one job's child to its end."""
        try:
            process = await asyncio.create_subprocess_exec(
                sys.executable, "-P", "-m", "tracker.page.work",
                stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE,
                stderr=asyncio.subprocess.PIPE, limit=LINE_LIMIT,
            )  # fmt: skip
        except OSError as error:  # too many processes, no memory
            job.error = {"message": f"the work cannot be started ({error.strerror})"}
            self._end(job, "failed")
            return
        job.process = process
        to_child = cast(asyncio.StreamWriter, process.stdin)
        errors = asyncio.ensure_future(cast(asyncio.StreamReader, process.stderr).read())
        if job.state == "cancelling":
            await _stop(process)
        with contextlib.suppress(ConnectionError):
            to_child.write(json.dumps({"kind": job.kind, **job.task}).encode() + b"\n")
            await to_child.drain()
        async for line in cast(asyncio.StreamReader, process.stdout):
            self._hear(job, line)
        await process.wait()
        said = (await errors).decode("utf-8", "replace").strip().splitlines()
        if job.state == "cancelling":
            self._end(job, "cancelled")
        elif process.returncode == 0 and job.error is None:
            job.progress = 1.0
            self._end(job, "done")
        else:
            last = said[-1] if said else f"the work ended with status {process.returncode}"
            job.error = job.error or {"message": last}
            self._end(job, "failed")

    @staticmethod
    def _hear(job: Job, line: bytes) -> None:
        """Take in one line of a child; a line that is no JSON was printed by a library and says nothing."""
        try:
            said = json.loads(line)
        except ValueError:
            return
        if not isinstance(said, dict):
            return
        job.progress = float(said.get("progress", job.progress))
        if job.state == "running":
            job.text = str(said.get("text", job.text))
        job.error = said.get("error", job.error)
        job.status = int(said.get("status", job.status))
        job.result = said.get("done", job.result)
        if job.hear is not None:
            job.hear(said)

    def _end(self, job: Job, state: str) -> None:
        job.state, job.ended, job.process = state, time.monotonic(), None
        if job.finish is not None:
            job.finish(job)
        self._advance()


async def _stop(process: asyncio.subprocess.Process) -> None:
    """End a child: politely, so that it clears up; then hard."""
    with contextlib.suppress(ProcessLookupError):
        process.terminate()
        try:
            await asyncio.wait_for(process.wait(), GRACE)
        except TimeoutError:
            process.kill()
            await process.wait()
