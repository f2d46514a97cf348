"""A small term on disk: short simulated recordings of two benches, and a crew that works in the test's process."""

from __future__ import annotations

from concurrent.futures import Executor, Future
from pathlib import Path

from tracker.simulate import Scene, simulate, write_bench

SCENE = {
    "seconds": 5.0, "frame_rate": 12.0, "width": 144, "height": 160, "first": 1.0, "plateau": 1.2, "droplets": 4,
    "voltages": (0.0, 400.0), "radii": (0.6e-6, 0.72e-6, 0.8e-6, 0.7e-6), "charge_numbers": (-1, -2, -3, -2),
}  # fmt: skip


def make_recording(path: Path, *, seed: int, **changes: object) -> Path:
    """Write a recording of 5 s without its truth files."""
    files = simulate(Scene(**(SCENE | changes)), path, seed=seed)
    files.truth_json.unlink()
    files.truth_npz.unlink()
    return files.recording


def make_term(folder: Path, *, benches: tuple[str, ...] = ("north", "south"), each: int = 2) -> Path:
    """Write recordings of some benches, each bench with its own bench file."""
    for number, name in enumerate(benches):
        for i in range(each):
            make_recording(folder / name / f"2026-10-{5 + 7 * i:02d}" / f"clip{i}.avi", seed=100 * number + i)
        path = write_bench(Scene(**SCENE), folder / name / "bench.toml", recording="clip.avi")
        path.write_text(path.read_text().replace('"3 um"', '"3.000(6) um"').replace('"6 mm"', '"6.00(1) mm"'))
    return folder


class InlineExecutor(Executor):
    """Does each call at once, in the caller's thread."""

    def submit(self, fn, /, *args, **kwargs):
        future: Future = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


class InlineCrew:
    """The test's own process as the only worker."""

    slots = 1
    losses = ()

    def executor(self):
        return InlineExecutor()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        return None
