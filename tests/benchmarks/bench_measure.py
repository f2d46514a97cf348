"""Time of a whole `fallrise measure`, process start and files included, over OpenCV's plain reading in one thread.

    python tests/benchmarks/bench_measure.py

Simulates recordings of a minute, times both in turn, prints medians and their ratio and the machine, and writes
`measure.md` beside this file. Only ratios within one run mean something.
"""

from __future__ import annotations

import os
import platform
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from statistics import median

from tracker.simulate import Scene, simulate, write_bench

RUNS = 3
SCENES = {
    "640 x 480, Motion-JPEG, 12 droplets": ("a.avi", Scene(droplets=12, seconds=60.0, width=640, height=480)),
    "640 x 480, H.264, 12 droplets": ("b.mp4", Scene(droplets=12, seconds=60.0, width=640, height=480)),
    "1280 x 960, Motion-JPEG, 40 droplets": (
        "c.avi",
        Scene(droplets=40, seconds=60.0, width=1280, height=960),
    ),
}
START = (
    "from importlib import import_module as load\n"
    "for name in ('tracker.cli', 'tracker.bench', 'tracker.seeing.see', 'av', 'pint'):\n    load(name)\n"
    "load('tracker.measure').import_ahead()"
)
READ = "import cv2, sys\ncv2.setNumThreads(1)\nvideo = cv2.VideoCapture(sys.argv[1])\nwhile video.read()[0]:\n    pass"


def seconds(command: list[str]) -> float:
    """Wall time of one process."""
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENCV_FFMPEG_THREADS": "1"}
    start = time.perf_counter()
    subprocess.run(command, check=True, capture_output=True, env=environment)
    return time.perf_counter() - start


def row(name: str, file: str, scene: Scene, folder: Path) -> str:
    """Time one recording; reading, measuring and starting take turns."""
    recording = folder / file
    simulate(scene, recording, seed=31)
    bench = write_bench(scene, folder / f"{file}.toml", recording=recording)
    read, measured, started = [], [], []
    for _ in range(RUNS):
        read.append(seconds([sys.executable, "-c", READ, str(recording)]))
        line = [sys.executable, "-m", "tracker.cli", "measure", str(recording), "--bench", str(bench)]
        measured.append(seconds(line))
        started.append(seconds([sys.executable, "-c", START]))
    plain = median(read) - seconds([sys.executable, "-c", "import cv2"])
    all_, start = median(measured), median(started)
    return (
        f"| {name} | {plain:.2f} s | {all_:.2f} s | {all_ / plain:.2f} | {start:.2f} s | "
        f"{(all_ - start) / plain:.2f} |"
    )


def main() -> None:
    """Print the table and write it."""
    lines = [
        "# A whole measurement over plain reading",
        "",
        f"{platform.processor() or platform.machine()}, {os.cpu_count()} cores, load {os.getloadavg()[0]:.1f} "
        f"before the start; Python {platform.python_version()}; medians of {RUNS} runs in turn.",
        "",
        "Start: of the process and of all libraries that a measurement imports.",
        "",
        "| recording of a minute | OpenCV reads it, one thread | `fallrise measure`, all of it | ratio | start "
        "| ratio without start |",
        "|---|---|---|---|---|---|",
    ]
    with tempfile.TemporaryDirectory() as folder:
        lines += [row(name, file, scene, Path(folder)) for name, (file, scene) in SCENES.items()]
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
    lines += ["", f"Peak memory of the largest process: {peak:.0f} MB."]
    text = "\n".join([*lines, ""])
    print(text)
    Path(__file__).with_name("measure.md").write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
