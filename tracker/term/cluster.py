"""Workers of a dask.distributed cluster behind the same executor interface as processes on this machine."""

from __future__ import annotations

from concurrent.futures import BrokenExecutor, CancelledError, Executor
from pathlib import Path
from types import TracebackType
from typing import Any

from physics.errors import FallriseError
from tracker.errors import UsageError
from tracker.term.work import WorkerVersionError, current_version

_SENT_AHEAD = 64
_PATIENCE = 20.0  # s to find the scheduler and its first worker


class ClusterError(FallriseError):
    """The cluster cannot be used.

    Parameters
    ----------
    address : str
        Of the scheduler.
    problem : str
        What was found, and what to do.
    """

    def __init__(self, address: str, problem: str) -> None:
        super().__init__(address, problem)
        self.address, self.problem = address, problem

    def __str__(self) -> str:
        return f"{self.address}: {self.problem}"


class ClusterCrew:
    """Workers of a scheduler; all must see the same files under the same names and run the same version.

    Parameters
    ----------
    address : str
        Of the scheduler, such as ``tcp://10.0.0.5:8786``.
    shared : Path
        A file in the output folder that every worker must see.
    """

    def __init__(self, address: str, shared: Path) -> None:
        self.address, self.shared = address, shared.absolute()
        self.slots = 1
        self.losses: tuple[type[BaseException], ...] = (BrokenExecutor, CancelledError)
        self._client: Any = None
        self._executor: Executor | None = None

    def executor(self) -> Executor:
        """Give the cluster's executor."""
        if self._executor is None:
            raise RuntimeError("a crew is used in a `with` block")
        if self._client.status != "running":
            raise ClusterError(
                self.address, "the scheduler is gone; run the batch again, finished work is kept"
            )
        return self._executor

    def __enter__(self) -> ClusterCrew:
        try:
            from distributed import Client
            from distributed.scheduler import KilledWorker
        except ImportError as error:
            raise UsageError("--cluster needs dask.distributed: pip install 'fallrise[cluster]'") from error
        self.losses = (BrokenExecutor, CancelledError, KilledWorker)
        try:
            make: Any = Client
            self._client = make(self.address, timeout=_PATIENCE, set_as_default=False)
            self._client.wait_for_workers(1, timeout=_PATIENCE)
        except (OSError, TimeoutError, ValueError) as error:
            self.close()
            raise ClusterError(self.address, f"no scheduler with a worker there ({error}); start `dask scheduler` "
                               "and `dask worker`") from error  # fmt: skip
        try:
            self._check_workers()
        except BaseException:
            self.close()
            raise
        # pure=False: a task that has the same arguments as an earlier one is still run.
        self._executor = self._client.get_executor(pure=False)
        return self

    def _check_workers(self) -> None:
        """Refuse workers with another version or another view of the files."""
        for worker, (found, sees) in self._client.run(_look, str(self.shared)).items():
            if found != current_version():
                raise WorkerVersionError(worker, found, current_version())
            if not sees:
                raise ClusterError(
                    worker, f"does not see {self.shared.parent}; share the folder under one name"
                )
        # The scheduler hands out the work: more is sent than runs now, so that workers that join find some.
        self.slots = max(_SENT_AHEAD, sum(self._client.nthreads().values()))

    def close(self) -> None:
        """Leave the cluster; its workers go on for others."""
        if self._client is not None:
            self._client.close(timeout=5)
        self._client = self._executor = None

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._executor is not None:
            self._executor.shutdown(wait=False)  # futures that are not done are cancelled
        self.close()


def _look(path: str) -> tuple[str, bool]:
    """Tell the version of fallrise and whether a file is there; runs in each worker."""
    return current_version(), Path(path).is_file()
