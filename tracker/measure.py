"""The main job: one recording -> its result folder. Reads top to bottom like the design.

bench -> seeing -> voltage and links -> droplets -> tables. Heavy libraries are imported when the work begins.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from importlib import import_module
from pathlib import Path
from threading import Thread
from typing import TYPE_CHECKING

from tracker.errors import RecordingError, ResultError, UsageError

if TYPE_CHECKING:
    from tracker.bench import Bench
    from tracker.keeping.store import Result
    from tracker.records import Seen, Settings

Progress = Callable[[float, float], None]


def measure(
    path: Path | str,
    *,
    bench: Bench | Path | str | None = None,
    out: Path | str | None = None,
    settings: Settings | None = None,
    progress: Progress | None = None,
) -> Result:
    """Measure one recording.

    Parameters
    ----------
    path : Path or str
        Video file, multi-page TIFF, or folder of pictures.
    bench : Bench, Path or str, optional
        The bench or its file; if not given, found beside or above the recording.
    out : Path or str, optional
        Result folder; ``STEM.fallrise`` beside the recording if not given. Decisions in it are kept and obeyed.
    settings : Settings, optional
        Part of picture and time, table format, false-alarm rate.
    progress : callable, optional
        Takes (done, total) in frames; total 0 where the end is not known.

    Returns
    -------
    result : Result
        Tables as DataFrames and the provenance, as written to the folder.

    Raises
    ------
    FallriseError
        One line: what, which file, what to do. Nothing that was there before is lost.
    """
    import cv2

    from tracker.bench import Bench, load_bench
    from tracker.keeping.store import result_folder
    from tracker.records import Settings
    from tracker.seeing.see import see

    cv2.setNumThreads(1)  # the pictures are small, and the other cores decode
    path = Path(path)
    settings = settings or Settings()
    _require_recording(path)
    folder = result_folder(path) if out is None else Path(out)
    _require_writable(folder)
    bench = bench if isinstance(bench, Bench) else load_bench(bench, recording=path)

    Thread(target=import_ahead, daemon=True).start()
    seen = see(path, settings=settings, frame_rate=bench.frame_rate, lamp=bench.field.lamp, progress=progress)
    if len(seen.recording.frame_times) < 2:
        raise RecordingError(
            str(path), "has only one frame, which gives no speed; record at least a few seconds"
        )
    _require_window(seen, settings)
    return _evaluated(seen, bench.fitted_to(seen.recording.width, seen.recording.height), settings, folder)


def _evaluated(seen: Seen, bench: Bench, settings: Settings, folder: Path) -> Result:
    """Link, evaluate and write what was seen."""
    from tracker.keeping.decisions import read_decisions
    from tracker.keeping.store import write_result
    from tracker.motion.analysis import Given
    from tracker.motion.droplets import evaluate_droplets
    from tracker.provenance import as_stored, assemble
    from tracker.voltage import field_and_tracks

    field, tracks = field_and_tracks(seen, bench, settings)
    given = Given(seen.recording, field, bench, settings, seen.cuts)
    evaluation = evaluate_droplets(as_stored(tracks), given, decisions=read_decisions(folder))
    result = assemble(evaluation, given, report=seen.report, warnings=seen.warnings, folder=folder)
    return write_result(result, folder, tables=settings.tables)


def import_ahead() -> None:
    """Import what comes after the seeing while frames are decoded, which needs no interpreter; it saves a second."""
    import_module("tracker.keeping.decisions")
    import_module("tracker.motion.droplets")
    import_module("tracker.voltage")
    import_module("tracker.provenance")
    import_module("pandas")
    import_module("pyarrow.csv")


def _require_recording(path: Path) -> None:
    """A missing recording is told before anything is said about benches."""
    if not path.exists():
        raise RecordingError(str(path), "no such file or folder; check the name")
    if path.is_file() and path.stat().st_size == 0:
        raise RecordingError(str(path), "is empty (0 bytes); copy the recording again")


def _require_window(seen: Seen, settings: Settings) -> None:
    """A time window that leaves nothing of the recording is a slip, no recording without droplets."""
    first, last = (float(seen.recording.frame_times[i]) for i in (0, -1))
    low, high = settings.start, settings.end
    if (low is not None and low > last) or (high is not None and high < first):
        raise UsageError(
            f"no frame lies in the time window: the recording lasts from {first:g} s to {last:g} s"
        )


def _require_writable(folder: Path) -> None:
    """A folder that cannot be written is told before the work, not after it."""
    home = folder
    while not home.exists() and home != home.parent:
        home = home.parent
    if not home.is_dir():
        raise ResultError(str(home), "is a file; name another folder with --out")
    if not os.access(home, os.W_OK | os.X_OK):
        raise ResultError(
            str(home), "cannot be written; change its permissions or name another folder with --out"
        )
