"""The inspection page for tests: a small measured recording, the app in this process, the server in its own."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
import threading
import time
from pathlib import Path
from typing import Any

import httpx
import psutil
import uvicorn

from tracker.measure import measure
from tracker.page.server import listen, make_app, server_config
from tracker.page.site import Site
from tracker.simulate import Scene, simulate, write_bench

TOKEN = "a-token-for-tests"
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
CHROMIUM_FLAGS = [
    "--no-sandbox", "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--no-first-run", "--disable-gpu", "--disable-quic",
]  # fmt: skip


def simulated_recording(folder: Path, *, name: str = "clip", seed: int = 5, **changes: Any) -> Path:
    """Simulate a short recording with its bench file beside it."""
    values = {"droplets": 6, "seconds": 9.0, "width": 320, "height": 240, "frame_rate": 20.0, **changes}
    scene = Scene(**values)
    folder.mkdir(parents=True, exist_ok=True)
    recording = simulate(scene, folder / f"{name}.avi", seed=seed).recording
    write_bench(scene, folder / "bench.toml", recording=recording)
    return recording


def measured_recording(folder: Path, **changes: Any) -> Path:
    """Simulate and measure a short recording; gives the result folder."""
    result = measure(simulated_recording(folder, **changes))
    return Path(str(result.folder))


class Page:
    """The app behind real sockets, in a thread of this process, so that a test can also change what lies below."""

    def __init__(self, site: Site) -> None:
        self._listener = listen(0)
        self.port = int(self._listener.getsockname()[1])
        self._server = uvicorn.Server(server_config(make_app(site, token=TOKEN, port=self.port)))
        self._thread = threading.Thread(target=self._server.run, args=([self._listener],))

    def __enter__(self) -> Page:
        self._thread.start()
        wait_for(lambda: self._server.started)
        return self

    def __exit__(self, *_: object) -> None:
        self._server.should_exit = True
        self._thread.join(20)
        self._listener.close()

    def client(self, *, signed_in: bool = True) -> httpx.Client:
        """Give a client, with the cookie of the page or without."""
        cookies = {f"fallrise-{self.port}": TOKEN} if signed_in else {}
        return httpx.Client(base_url=f"http://127.0.0.1:{self.port}", cookies=cookies, timeout=60)


class Server:
    """`fallrise inspect` in a process of its own; use it in a `with` block."""

    def __init__(self, target: Path | None, results: Path, *, cache: Path) -> None:
        command = [sys.executable, "-m", "tracker.cli", "inspect", *([str(target)] if target else [])]
        environment = {**os.environ, "FALLRISE_CACHE": str(cache), "PYTHONUNBUFFERED": "1"}
        self.process = subprocess.Popen(
            [*command, "--no-browser", "--results", str(results)], stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL, text=True, env=environment,
        )  # fmt: skip
        line = self.process.stdout.readline() if self.process.stdout else ""
        found = re.search(r"(http://127\.0\.0\.1:(\d+)/)\?token=([^\s#]+)\S*", line)
        if found is None:
            raise RuntimeError(f"the server printed {line!r} instead of its address")
        self.address, self.base, self.port, self.token = found[0], found[1], int(found[2]), found[3]

    def __enter__(self) -> Server:
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()

    def stop(self) -> None:
        """End the server as Ctrl+C does, and close the pipe."""
        if self.process.poll() is None:
            self.process.terminate()
            self.process.wait(20)
        if self.process.stdout is not None:
            self.process.stdout.close()

    def http(self) -> httpx.Client:
        """Give a signed-in client."""
        return httpx.Client(base_url=self.base, cookies={f"fallrise-{self.port}": self.token}, timeout=30)

    def children(self) -> list[psutil.Process]:
        """Give the processes that the server started."""
        return psutil.Process(self.process.pid).children(recursive=True)


def wait_for(what: Any, *, seconds: float = 30.0) -> Any:
    """Call until the answer is true; the last answer if it never was."""
    until = time.monotonic() + seconds
    while not (answer := what()) and time.monotonic() < until:
        time.sleep(0.05)
    return answer
