"""Worker processes: they share the work, may die, and leave with the batch."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import batch_work
import psutil
import pytest

from tracker.errors import UsageError
from tracker.term.crew import LocalCrew, run_all

HELPERS = Path(batch_work.__file__).parent


@pytest.fixture(autouse=True)
def _helpers_in_workers(monkeypatch):
    """New processes find the tests' helpers, as this one does."""
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join([str(HELPERS), os.environ.get("PYTHONPATH", "")]))


def test_every_task_is_done_once_by_two_processes(tmp_path):
    """Twelve tasks on two workers: twelve outcomes, none here."""
    with LocalCrew(2) as crew:
        found = dict(run_all(crew, batch_work.double, list(range(12)), str(tmp_path)))
    assert {task: outcome[0] for task, outcome in found.items()} == {i: 2 * i for i in range(12)}
    processes = {outcome[1] for outcome in found.values()}
    assert os.getpid() not in processes
    assert 1 <= len(processes) <= 2
    assert not any(psutil.pid_exists(pid) for pid in processes)


def test_killed_worker_costs_no_task(tmp_path):
    """A worker killed in the middle of a task is replaced, and all tasks are done."""
    with LocalCrew(2) as crew:
        found = dict(run_all(crew, batch_work.killed_once, list(range(10)), str(tmp_path)))
    assert found == {i: i for i in range(10)}
    assert (tmp_path / "killed").exists()


def test_task_that_always_kills_is_given_up_and_the_others_are_done(tmp_path):
    """A task that ends its worker beside others and twice alone has the outcome None; no other task suffers."""
    with LocalCrew(2) as crew:
        found = dict(run_all(crew, batch_work.always_killed, list(range(8)), str(tmp_path)))
    assert found == {i: None if i == 3 else i for i in range(8)}
    assert (tmp_path / "kills").read_text() == "xxx"


def test_error_of_the_work_reaches_the_caller(tmp_path):
    """An exception of the work itself is not taken for a dying worker."""
    with LocalCrew(1) as crew, pytest.raises(ValueError, match="one"):
        list(run_all(crew, batch_work.raises, [0, 1, 2], str(tmp_path)))


def test_worker_uses_one_thread(tmp_path):
    """Numerical libraries in a worker are told to use one thread."""
    with LocalCrew(1) as crew:
        assert list(run_all(crew, batch_work.threads, [0], str(tmp_path))) == [(0, (1, "1"))]


def test_workers_end_when_the_batch_is_killed(tmp_path):
    """After kill -9 of the process that started them no worker is left."""
    code = (
        "import sys; import batch_work\n"
        "from tracker.term.crew import LocalCrew, run_all\n"
        "if __name__ == '__main__':\n"
        "    with LocalCrew(2) as crew:\n"
        f"        list(run_all(crew, batch_work.sleep_long, [0, 1], {str(tmp_path)!r}))\n"
    )
    script = tmp_path / "script.py"
    script.write_text(code)
    started = subprocess.Popen([sys.executable, str(script)])
    try:
        pids = _wait_for(lambda: [int(p.name[3:]) for p in tmp_path.glob("pid*")], count=2)
    finally:
        started.send_signal(signal.SIGKILL)
        started.wait()
    assert _wait_for(lambda: [pid for pid in pids if not _alive(pid)], count=2) == pids


def _alive(pid: int) -> bool:
    try:
        return psutil.Process(pid).status() != psutil.STATUS_ZOMBIE
    except psutil.NoSuchProcess:
        return False


def _wait_for(look, *, count: int, seconds: float = 60.0) -> list[int]:
    """Look until there are so many."""
    end = time.monotonic() + seconds
    while len(found := look()) < count and time.monotonic() < end:
        time.sleep(0.05)
    return found


@pytest.mark.parametrize("workers", [0, -3])
def test_impossible_number_of_workers_is_wrong_usage(workers):
    """Fewer than one worker is refused with the value."""
    with pytest.raises(UsageError, match=str(workers)):
        LocalCrew(workers)
