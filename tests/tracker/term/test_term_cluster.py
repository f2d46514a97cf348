"""A batch on a dask cluster: a real scheduler and two worker processes on this machine's loopback."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pandas as pd
import pytest
import small_term

from tracker.term import cluster
from tracker.term.batch import Options, run_batch
from tracker.term.cluster import ClusterCrew, ClusterError
from tracker.term.ledger import read_ledger
from tracker.term.work import WorkerVersionError

pytestmark = pytest.mark.timeout(280)


class Cluster:
    """A scheduler and workers started by dask's own commands."""

    def __init__(self, folder: Path) -> None:
        self.file, self.processes = folder / "scheduler.json", []
        self.start("dask_scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard", "--no-show")
        for name in ("one", "two"):
            self.start("dask_worker", "--nthreads", "1", "--no-nanny", "--no-dashboard", "--name", name)
        end = time.monotonic() + 120
        while not self.file.exists() and time.monotonic() < end:
            time.sleep(0.05)
        self.address = json.loads(self.file.read_text())["address"]

    def start(self, module: str, *arguments: str) -> None:
        command = [
            sys.executable,
            "-m",
            f"distributed.cli.{module}",
            "--scheduler-file",
            str(self.file),
            *arguments,
        ]
        quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "cwd": self.file.parent}
        self.processes.append(subprocess.Popen(command, **quiet))

    def close(self) -> None:
        for process in reversed(self.processes):
            process.kill()
            process.wait()


@pytest.fixture(scope="module")
def running(tmp_path_factory):
    """Scheduler and two workers, ended with the tests of this file."""
    made = Cluster(tmp_path_factory.mktemp("cluster"))
    yield made
    made.close()


def two_workers(address: str) -> None:
    """Wait until both workers are there."""
    from distributed import Client

    with Client(address, set_as_default=False) as client:
        client.wait_for_workers(2, timeout=120)


def test_worker_with_another_version_is_refused(running, tmp_path, monkeypatch):
    """A batch of another version than its workers' ends before any work, naming worker and versions."""
    two_workers(running.address)
    (tmp_path / "lock").touch()
    monkeypatch.setattr(cluster, "current_version", lambda: "99.0")
    crew = ClusterCrew(running.address, tmp_path / "lock")
    with pytest.raises(WorkerVersionError, match=r"the batch has 99\.0"), crew:
        pass


def test_worker_that_does_not_see_the_folder_is_refused(running, tmp_path):
    """Workers must see the output folder under the batch's own name for it."""
    two_workers(running.address)
    crew = ClusterCrew(running.address, tmp_path / "only here" / "lock")
    with pytest.raises(ClusterError, match="does not see"), crew:
        pass


def test_no_scheduler_is_one_line(monkeypatch, tmp_path):
    """An address without a scheduler is told with what to start."""
    monkeypatch.setattr(cluster, "_PATIENCE", 0.5)
    with pytest.raises(ClusterError, match=r"tcp://127\.0\.0\.1:9: no scheduler") as caught:
        run_batch(_one(tmp_path), out=tmp_path / "out", options=Options(cluster="tcp://127.0.0.1:9"))
    assert "\n" not in str(caught.value)


def _one(folder: Path) -> Path:
    (folder / "term").mkdir()
    (folder / "term/clip.avi").write_bytes(b"x")
    return folder / "term"


def test_killed_worker_costs_a_retry_and_no_recording(running, tmp_path, monkeypatch):
    """With one of two workers killed in the middle, every recording is done, with the tables of a local batch."""
    small_term.make_term(tmp_path / "term", benches=("north",), each=5)
    two_workers(running.address)
    victim = running.processes[1]

    def kill_when_under_way() -> None:
        end = time.monotonic() + 200
        while time.monotonic() < end and not read_ledger(tmp_path / "out"):
            time.sleep(0.02)
        os.kill(victim.pid, signal.SIGKILL)

    killer = threading.Thread(target=kill_when_under_way)
    killer.start()
    made = run_batch(tmp_path / "term", out=tmp_path / "out", options=Options(cluster=running.address))
    killer.join()
    assert victim.wait(timeout=10) == -signal.SIGKILL
    assert [entry.status for entry in made.entries] == ["done"] * 5
    assert not list((tmp_path / "out").rglob("*.part*"))
    from tracker.term import batch as batch_room

    monkeypatch.setattr(batch_room, "_crew", lambda options, lock: small_term.InlineCrew())
    run_batch(tmp_path / "term", out=tmp_path / "local")
    here, there = (pd.read_csv(tmp_path / name / "droplets.csv") for name in ("local", "out"))
    pd.testing.assert_frame_equal(here, there)
    shutil.rmtree(tmp_path / "local")
